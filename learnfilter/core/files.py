"""Write files whole or not at all: beside, flush, rename."""

from __future__ import annotations

import json
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any


@contextmanager
def whole_file(path: str | Path) -> Iterator[Path]:
    """Yield a path beside `path` to write to; on success it takes the place of `path`.

    If the block raises or the process dies, `path` is as it was before.
    """
    path = Path(path)
    path.parent.mkdir(parents=True, exist_ok=True)
    beside = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        yield beside
        with beside.open("rb+") as file:
            os.fsync(file.fileno())
        os.replace(beside, path)
    finally:
        beside.unlink(missing_ok=True)


def write_json(path: str | Path, value: Any) -> None:
    """Write sorted, indented JSON (UTF-8) whole or not at all; NaN is refused."""
    with whole_file(path) as beside:
        text = json.dumps(value, indent=2, sort_keys=True, allow_nan=False, ensure_ascii=False)
        beside.write_text(text + "\n", encoding="utf-8")
