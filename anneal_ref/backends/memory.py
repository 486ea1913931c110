"""Memory: what the machine can still give, asked before any of it is taken."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from pathlib import Path

from anneal_ref.base.errors import TooLarge

# asking takes a tenth of a millisecond, much of a small run
_ALWAYS_THERE = 16 << 20


def available_bytes() -> int:
    """Return the bytes that new arrays can take without swapping, control-group limits included.

    Examples
    --------
    >>> available_bytes() > 0
    True
    """
    return min(_limits())


def require_memory(
    needed: int, purpose: str, alternatives: tuple[str, ...] | Callable[[int], tuple[str, ...]] = ()
) -> None:
    """Raise `TooLarge` if `needed` bytes are not there; allocate nothing.

    Parameters
    ----------
    needed : int
        Bytes at the peak of the work.
    purpose : str
        What they are for, as the subject of the message.
    alternatives : tuple of str, or function of the bytes that are free
        What else would do.
    """
    if needed < _ALWAYS_THERE:
        return
    available = available_bytes()
    if needed > available:
        if callable(alternatives):
            alternatives = alternatives(available)
        hint = "; alternatives: " + ", ".join(alternatives) if alternatives else ""
        raise TooLarge(
            f"{purpose} needs {readable_bytes(needed)}, and {readable_bytes(available)} are free{hint}",
            needed_bytes=needed,
            available_bytes=available,
            alternatives=alternatives,
        )


def readable_bytes(count: float) -> str:
    """Return a number of bytes with a binary unit.

    Examples
    --------
    >>> readable_bytes(3 * 2**30)
    '3.0 GiB'
    """
    for unit in ("bytes", "KiB", "MiB", "GiB", "TiB"):
        if count < 1024 or unit == "TiB":
            break
        count /= 1024
    return f"{count:.0f} {unit}" if unit == "bytes" else f"{count:.1f} {unit}" if count < 1e4 else f"{count:.1e} {unit}"


def _limits() -> Iterator[int]:
    try:
        text = Path("/proc/meminfo").read_text()
        yield next(int(line.split()[1]) * 1024 for line in text.splitlines() if line.startswith("MemAvailable:"))
    except (OSError, StopIteration, ValueError, IndexError):
        yield _physical_bytes()
    for folder, limit, used in (
        ("/sys/fs/cgroup", "memory.max", "memory.current"),
        ("/sys/fs/cgroup/memory", "memory.limit_in_bytes", "memory.usage_in_bytes"),
    ):
        try:
            yield max(0, int(Path(folder, limit).read_text()) - int(Path(folder, used).read_text()))
        except (OSError, ValueError):
            # no such control group, or one without a limit ("max")
            continue


def _physical_bytes() -> int:
    try:
        return os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    except (ValueError, OSError, AttributeError):
        # a platform that does not tell: nothing can be refused in advance
        return 2**63 - 1
