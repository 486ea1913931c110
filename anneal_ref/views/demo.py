"""The demo studies that come with the package, and how to copy one to a folder of one's own.

*Saltmarsh* is an invented processor that an invented coastal metrology laboratory accepts. `make_saltmarsh.py` beside
this file made its data, once, and states what is wrong with the processor.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path

from anneal_ref.base.checks import choice
from anneal_ref.base.errors import InputError, in_words

DEMOS = {"saltmarsh": "three lattices of 12 to 16 spins, two durations, 1000 shots each; a minute of work"}


def copy_demo(name: str, into: str | Path | None = None) -> Path:
    """Copy a demo study to a folder and return the folder.

    Parameters
    ----------
    name : str
        One of `DEMOS`.
    into : path, optional
        The folder; by default one called like the demo in the working directory. It is made if it is not there.

    Raises
    ------
    InputError
        There is no such demo, a file to be written exists already, or the folder cannot be written. In the first two
        cases nothing is written.

    Examples
    --------
    >>> import tempfile
    >>> folder = copy_demo("saltmarsh", Path(tempfile.mkdtemp()) / "saltmarsh")
    >>> (folder / "study.toml").is_file()
    True
    """
    name = choice("demo", name, DEMOS)
    folder = Path(into) if into is not None else Path(name)
    parts = list(_parts(files("anneal_ref.views") / name, Path()))
    present = [str(folder / place) for place, _ in parts if (folder / place).exists()]
    if present or (folder.exists() and not folder.is_dir()):
        first = present[0] if present else str(folder)
        raise InputError(
            f"the demo would overwrite {first}; nothing was written. Give another folder with --into, or take the "
            "old one away"
        )
    try:
        for place, source in parts:
            target = folder / place
            target.parent.mkdir(parents=True, exist_ok=True)
            with source.open("rb") as reader, target.open("xb") as writer:
                shutil.copyfileobj(reader, writer)
    except OSError as error:
        raise InputError(f"the demo cannot be written to {folder}: {in_words(error)}") from error
    return folder


def _parts(folder: Traversable, place: Path) -> Iterator[tuple[Path, Traversable]]:
    for item in sorted(folder.iterdir(), key=lambda one: one.name):
        if item.is_dir() and not item.name.startswith("_"):
            yield from _parts(item, place / item.name)
        elif item.is_file() and os.path.splitext(item.name)[1] in (".toml", ".csv", ".json", ".md"):
            yield place / item.name, item
