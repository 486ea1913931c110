"""Kernels of the strip elimination: one pass over a table each."""

from __future__ import annotations

from numba import njit


@njit(cache=True, nogil=True)
def add_table(plus, minus, table, low, high, own):  # type: ignore[no-untyped-def]
    """Add an earlier table to the energies with the spin up and with the spin down.

    Entry x of `plus` and `minus` meets entry low[x mod 2^k] + high[x div 2^k] of the table, 2^k = low.size, and this
    plus `own` when the spin is down.
    """
    for block in range(high.size):
        start = block * low.size
        base = high[block]
        for x in range(low.size):
            place = base + low[x]
            plus[start + x] += table[place]
            minus[start + x] += table[place + own]


@njit(cache=True, nogil=True)
def multiply_table(plus, minus, table, low, high, own):  # type: ignore[no-untyped-def]
    """Multiply by an earlier table of counts; see `add_table`."""
    for block in range(high.size):
        start = block * low.size
        base = high[block]
        for x in range(low.size):
            place = base + low[x]
            plus[start + x] *= table[place]
            minus[start + x] *= table[place + own]


@njit(cache=True, nogil=True)
def minimise(plus, minus, choices):  # type: ignore[no-untyped-def]
    """Keep the lesser energy in `plus`; pack who won, two bits an entry: 1 up, 2 down, 3 both."""
    choices[:] = 0
    for x in range(plus.size):
        up, down = plus[x], minus[x]
        plus[x] = min(up, down)
        choices[x >> 2] |= ((up <= down) | ((down <= up) << 1)) << (2 * (x & 3))


@njit(cache=True, nogil=True)
def add_counts(plus, minus, choices):  # type: ignore[no-untyped-def]
    """Sum, in `plus`, the counts of the side or sides that won."""
    for x in range(plus.size):
        choice = choices[x >> 2] >> (2 * (x & 3))
        # selections rather than branches: who wins is as good as random
        plus[x] = (plus[x] if choice & 1 else 0.0) + (minus[x] if choice & 2 else 0.0)
