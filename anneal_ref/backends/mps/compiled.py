"""The entry points of the kernels, cached on disk under a stamp of all their sources (see `backends.stamp`)."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from numba import njit

from anneal_ref.backends.mps import absorbing, dividing, effective, krylov
from anneal_ref.backends.stamp import stamp_of

KERNELS = ("blas", "effective", "krylov", "absorbing", "dividing")


def _entries(stamp: int) -> tuple[Any, ...]:
    @njit(cache=True, nogil=True)
    def evolve(theta, tau, tolerance, left, right, wires, inner, flips, strengths, evens, sites, even):  # type: ignore[no-untyped-def]
        """Return exp(-i tau H) theta and the number of Lanczos vectors, H made of the blocks on both sides."""
        stamp  # noqa: B018
        lhx, lhz, lops = left
        rhx, rhz, rops = right
        left_near, left_far, right_near, right_far, cross_left, cross_right = wires
        transverse, problem = strengths
        de, re = evens
        kl = effective.side(lhx, lhz, lops, left_near, left_far, inner, transverse, problem, sites, False, even)
        kr = effective.side(rhx, rhz, rops, right_near, right_far, 0.0 * inner, transverse, problem, sites, True, even)
        count = len(cross_left)
        lefts = effective.left_stacks(effective.combined(cross_left, lops), even, problem)
        rights = effective.right_stacks(effective.combined(cross_right, rops), even)
        return krylov.exponential(
            theta, tau, tolerance, kl, kr, lefts, rights, count, de, re, transverse * flips, sites, even
        )

    @njit(cache=True, nogil=True)
    def absorb(block, a, mix, near, weight, field, de, ne, even):  # type: ignore[no-untyped-def]
        """See `absorbing.absorb`."""
        stamp  # noqa: B018
        hx, hz, operators = block
        return absorbing.absorb(hx, hz, operators, a, mix, near, weight, field, de, ne, even)

    @njit(cache=True, nogil=True)
    def join(a, b, dm, even):  # type: ignore[no-untyped-def]
        """See `dividing.join`."""
        stamp  # noqa: B018
        return dividing.join(a, b, dm, even)

    @njit(cache=True, nogil=True)
    def divide(theta, most, truncation, even):  # type: ignore[no-untyped-def]
        """See `dividing.divide`."""
        stamp  # noqa: B018
        return dividing.divide(theta, most, truncation, even)

    @njit(cache=True, nogil=True)
    def orthogonalise(a, n_even, even):  # type: ignore[no-untyped-def]
        """See `dividing.orthogonalise`."""
        stamp  # noqa: B018
        return dividing.orthogonalise(a, n_even, even)

    @njit(cache=True, nogil=True)
    def attach(bond, b, k_even, n_even, even):  # type: ignore[no-untyped-def]
        """See `dividing.attach`."""
        stamp  # noqa: B018
        return dividing.attach(bond, b, k_even, n_even, even)

    return evolve, absorb, join, divide, orthogonalise, attach


evolve, absorb, join, divide, orthogonalise, attach = _entries(stamp_of(Path(__file__).parent, KERNELS))
