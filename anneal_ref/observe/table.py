"""`Table`: the bare contents of a sample file, whatever its format, and what makes spins of them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import InputError
from anneal_ref.observe.manifest import Manifest

ALLOWED = {"spins": (1, -1), "bits": (0, 1)}
MOST_SHOTS = 10**9
"""A count column may not add up to more shots than this."""


@dataclass(frozen=True, slots=True, eq=False)
class Table:
    """What a file holds before its values are understood.

    Parameters
    ----------
    rows : ndarray of numbers, shape (n_rows, n_sites)
    path : str
        Starts every message.
    values : {"spins", "bits"}, optional
        What the file says its values are.
    manifest : Manifest
    counts, groups : ndarray of int, shape (n_rows,), optional
    place : callable
        Words for where a row and a column are in the file.
    """

    rows: NDArray[Any]
    path: str
    values: str | None = None
    manifest: Manifest = field(default_factory=Manifest)
    counts: NDArray[np.int64] | None = None
    groups: NDArray[np.int64] | None = None
    place: Callable[[int, int], str] = lambda row, column: f"shot {row}, site {column}"


def to_spins(table: Table, values: str | None) -> NDArray[np.int8]:
    """Return the rows as int8 spins.

    Parameters
    ----------
    table : Table
    values : {"spins", "bits"} or None
        None: a -1 in the table shows that it holds spins.

    Raises
    ------
    InputError
        A value that is not allowed (its place is named), or a table that does not say what a 1 in it means.
    """
    rows = table.rows
    is_bits = values == "bits"
    if values is None and not np.any(rows == -1) and np.all((rows == 0) | (rows == 1)):
        what = "0 and 1 only" if np.any(rows == 0) else "ones only, which may be all up (spins) or all down (bits)"
        raise InputError(
            f"{table.path}: the file holds {what}, and does not say what they mean; say values='bits' (0 is +1, 1 is "
            "-1) or values='spins', or put a line '# values: bits' or '# values: spins' at its head"
        )
    low, high = (0, 1) if is_bits else (-1, 1)
    bad = (rows != low) & (rows != high)
    if bad.any():
        row, column = np.unravel_index(int(bad.argmax()), bad.shape)
        hint = ""
        if rows[row, column] == 0 and not is_bits:
            hint = "; a file of bits is read with values='bits' or a line '# values: bits' at its head"
        raise InputError(
            f"{table.path}: {table.place(int(row), int(column))}: {rows[row, column]:g} is not allowed; "
            f"a file of {'bits holds 0 (for +1) and 1 (for -1)' if is_bits else 'spins holds +1 and -1'} only{hint}"
        )
    spins = rows.astype(np.int8)
    return np.asarray(1 - 2 * spins if is_bits else spins, dtype=np.int8)


def expand(spins: NDArray[np.int8], table: Table) -> tuple[NDArray[np.int8], NDArray[np.int64] | None]:
    """Return spins and groups with each row repeated as often as it was counted.

    Raises
    ------
    InputError
        Counts that add up to no shot, or to more than memory could hold.
    """
    if table.counts is None:
        return spins, table.groups
    total = float(table.counts.astype(np.float64).sum())
    if not 1 <= total <= MOST_SHOTS:
        raise InputError(f"{table.path}: the counts add up to {total:.10g} shots; allowed are 1 to {MOST_SHOTS}")
    groups = None if table.groups is None else np.repeat(table.groups, table.counts)
    return np.repeat(spins, table.counts, axis=0), groups
