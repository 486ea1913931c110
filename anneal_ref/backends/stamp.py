"""A stamp of kernel sources, under which compiled entry points are cached.

Numba keys a cached function to the file that defines it, not to the files of the functions it calls. A stamp of all
sources, a constant in each entry point's closure, is part of the key too: when any kernel file changes, all of them
compile again.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from pathlib import Path


def stamp_of(folder: Path, kernels: Sequence[str]) -> int:
    """Return a number of 56 bits from the sources `kernels`, names of modules in `folder`."""
    sources = b"".join((folder / f"{name}.py").read_bytes() for name in kernels)
    return int.from_bytes(hashlib.sha256(sources).digest()[:7], "little")
