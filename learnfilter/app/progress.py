"""Progress of long work: a bar with time left on a terminal, plain lines elsewhere.

Rooms below take any callable `tick(done, total, note)` and know nothing of this module.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TextIO

from rich.console import Console
from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

Tick = Callable[[int, int, str], None]

# Seconds between plain lines: oftener floods a log file, more seldom looks dead.
PLAIN_EVERY_S = 5.0


@contextmanager
def progress(label: str, stream: TextIO | None = None) -> Iterator[Tick]:
    """Yield `tick(done, total, note)`, which shows how far `label` has come.

    Args:
        label: what is being done.
        stream: where it is shown; standard error unless given, so that results stay alone on standard output.
    """
    stream = stream or sys.stderr
    if not stream.isatty():
        yield plain_ticks(label, stream)
        return
    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        TaskProgressColumn(),
        TimeRemainingColumn(),
        TextColumn("{task.fields[note]}"),
    )
    with Progress(*columns, console=Console(file=stream)) as bar:
        task, last = bar.add_task(label, total=None, note=""), 0

        def tick(done: int, total: int, note: str) -> None:
            nonlocal last
            if done < last:  # another stage begins: its pace is its own
                bar.reset(task, total=total)
            last = done
            bar.update(task, completed=done, total=total, note=note)

        yield tick


def plain_ticks(label: str, stream: TextIO, clock: Callable[[], float] = time.monotonic) -> Tick:
    """A tick that prints a line now and then, and one at the end.

    Counting begins anew where `done` falls back: several stages may share one tick.
    """
    start, said, first, last = clock(), clock(), 0, 0

    def tick(done: int, total: int, note: str) -> None:
        nonlocal start, said, first, last
        now = clock()
        if done < last:
            start, first = now, done
        last = done
        if done < total and now - said < PLAIN_EVERY_S:
            return
        said = now
        left = (now - start) * (total - done) / max(done - first, 1)
        tail = f", {left:.0f} s left" if first < done < total else ""
        print(f"{label}: {done} of {total}{tail}{' ' + note if note else ''}", file=stream, flush=True)

    return tick
