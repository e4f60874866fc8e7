"""Where the shipped folders (configs, toy_worlds) are, in a wheel and in a checkout."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path


def data_dir(name: str) -> Path:
    """The shipped folder `name`.

    A wheel carries it inside the package; a checkout, and an editable install, beside the package.

    Raises:
        FileNotFoundError: neither is there, so the installation is broken.
    """
    package = Path(str(files("learnfilter")))
    for folder in (package / "_data" / name, package.parent / name):
        if folder.is_dir():
            return folder
    raise FileNotFoundError(f"the folder '{name}' is missing from this installation of learnfilter")
