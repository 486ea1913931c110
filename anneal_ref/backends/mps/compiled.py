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
        kl, kr, lefts, rights, count = effective.assembled(left, right, wires, inner, strengths, sites, even)
        de, re = evens
        return krylov.exponential(
            theta, tau, tolerance, kl, kr, lefts, rights, count, de, re, strengths[0] * flips, sites, even
        )

    @njit(cache=True, nogil=True)
    def lowest(theta, tolerance, avoided, left, right, wires, inner, flips, strengths, evens, sites, even):  # type: ignore[no-untyped-def]
        """Return the lowest state, its energy and the number of products, H made of the blocks on both sides."""
        stamp  # noqa: B018
        kl, kr, lefts, rights, count = effective.assembled(left, right, wires, inner, strengths, sites, even)
        return krylov.lowest(
            theta,
            tolerance,
            avoided,
            kl,
            kr,
            lefts,
            rights,
            count,
            evens[0],
            evens[1],
            strengths[0] * flips,
            sites,
            even,
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

    return evolve, lowest, absorb, join, divide, orthogonalise, attach


evolve, lowest, absorb, join, divide, orthogonalise, attach = _entries(stamp_of(Path(__file__).parent, KERNELS))
