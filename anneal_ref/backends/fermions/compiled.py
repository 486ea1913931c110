"""The entry points of the kernels, cached on disk under a stamp of all their sources (see `backends.stamp`)."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from numba import njit

from anneal_ref.backends.fermions import measuring, pfaffians, turning
from anneal_ref.backends.stamp import stamp_of

KERNELS = ("turning", "eliminating", "pfaffians", "measuring", "../exact/phases", "../exact/simd")


def _entries(stamp: int) -> tuple[Any, ...]:
    @njit(cache=True, nogil=True)
    def tables(angles, strengths, c, s):  # type: ignore[no-untyped-def]
        """See `turning.tables`."""
        stamp  # noqa: B018
        turning.tables(angles, strengths, c, s)

    @njit(cache=True, nogil=True)
    def advance(v, room, spans, cut, first, stop, n, ring, edge, cp, sp, cx, sx):  # type: ignore[no-untyped-def]
        """See `turning.advance`."""
        stamp  # noqa: B018
        turning.advance(v, room, spans, cut, first, stop, n, ring, edge, cp, sp, cx, sx)

    @njit(cache=True, nogil=True)
    def sum_rows(v, room, spans, norms):  # type: ignore[no-untyped-def]
        """See `turning.sum_rows`."""
        stamp  # noqa: B018
        turning.sum_rows(v, room, spans, norms)

    @njit(cache=True, nogil=True)
    def pair_rows(v, room, spans, ring, partner, band):  # type: ignore[no-untyped-def]
        """See `turning.pair_rows`."""
        stamp  # noqa: B018
        turning.pair_rows(v, room, spans, ring, partner, band)

    @njit(cache=True, nogil=True)
    def correlations(band, ends, s, work, out):  # type: ignore[no-untyped-def]
        """See `pfaffians.correlations`."""
        stamp  # noqa: B018
        pfaffians.correlations(band, ends, s, work, out)

    @njit(cache=True, nogil=True)
    def measure(band, s, draws, outcomes, given, logs, least):  # type: ignore[no-untyped-def]
        """See `measuring.measure`."""
        stamp  # noqa: B018
        measuring.measure(band, s, draws, outcomes, given, logs, least)

    return tables, advance, sum_rows, pair_rows, correlations, measure


tables, advance, sum_rows, pair_rows, correlations, measure = _entries(stamp_of(Path(__file__).parent, KERNELS))
