"""Provenance: which library, which numerical packages, which machine made a number, and when."""

from __future__ import annotations

import os
import platform
from datetime import UTC, datetime
from importlib import metadata

_PACKAGES = ("numpy", "scipy", "numba", "quimb", "h5py")


def library_version() -> str:
    """Version of the installed package."""
    try:
        return metadata.version("anneal_ref")
    except metadata.PackageNotFoundError:
        return "not installed"


def now() -> str:
    """Time of the call in UTC, ISO 8601, to the second."""
    return datetime.now(UTC).replace(microsecond=0).isoformat()


def provenance() -> dict[str, str]:
    """Return versions, machine and time as plain strings; nothing that names a person or a folder.

    Examples
    --------
    >>> sorted(provenance())[:3]
    ['anneal_ref', 'cores', 'created_at']
    """
    facts = {"anneal_ref": library_version(), "python": platform.python_version()}
    for package in _PACKAGES:
        try:
            facts[package] = metadata.version(package)
        except metadata.PackageNotFoundError:
            facts[package] = "absent"
    facts["machine"] = f"{platform.system()} {platform.machine()}"
    facts["cores"] = str(os.cpu_count())
    facts["created_at"] = now()
    return facts
