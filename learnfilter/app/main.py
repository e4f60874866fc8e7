"""Where the console command starts: nothing but the standard library until the rest is known to be there."""

from __future__ import annotations

import sys
from importlib.util import find_spec

# One module of each package of the extra `train` that the command cannot start without.
NEEDED = ("hydra", "hydra_plugins", "matplotlib", "numba", "pyarrow", "rich", "scipy", "shapely", "torch")


def main() -> int:
    """Run the command line; returns its exit code: 0 fine, 2 the user's input, 1 our fault."""
    missing = [name for name in NEEDED if find_spec(name) is None]
    if missing:
        print(
            f"learnfilter: this command needs the extra 'train' ({', '.join(missing)} not installed): "
            "pip install 'learnfilter[train]'; a robot needs only `import learnfilter.runtime`",
            file=sys.stderr,
        )
        return 2
    from learnfilter.app.threads import wait_passively

    wait_passively()
    from learnfilter.app.command import run_command

    return run_command(sys.argv[1:])


if __name__ == "__main__":
    sys.exit(main())
