"""Readout flips: from what was read to what was there, on the level of moments."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.observe.moments import Moments


def undo_flips(moments: Moments, up_flips: ArrayLike, down_flips: ArrayLike) -> Moments:
    """Return the moments before readout flipped spins independently of each other.

    Parameters
    ----------
    moments : Moments
        As measured.
    up_flips : array_like, shape (n_sites,) or ()
        e0, the probability that a spin +1 is read as -1.
    down_flips : array_like, shape (n_sites,) or ()
        e1, the probability that a spin -1 is read as +1.

    Returns
    -------
    Moments
        With a = 1 - e0 - e1 and b = e1 - e0, <Z_i> = (m_i - b_i)/a_i and
        <Z_i Z_j> = (m_ij - b_i m_j - b_j m_i + b_i b_j)/(a_i a_j). They may lie outside [-1, 1] by their error.
        `stat` is exact for equal rates (b = 0) and else an upper bound, since moments do not know how m_ij, m_i and
        m_j vary together; `samples.estimate(lambda m: undo_flips(m, e0, e1).zz.value)` does. The rates are taken as
        exact.

    Raises
    ------
    InputError
        Rates outside [0, 1], or e0 + e1 of 1 or more, where the readout says nothing.

    Examples
    --------
    >>> true = Moments.of([0.2, 0.0], [[1, 0.5], [0.5, 1]])
    >>> read = apply_flips(true, [0.1, 0.0], 0.02)
    >>> bool(np.allclose(undo_flips(read, [0.1, 0.0], 0.02).zz.value, true.zz.value))
    True
    """
    a, b = _response(moments.n_sites, up_flips, down_flips)
    m, mm = moments.z, moments.zz
    tilt = np.outer(b, m.value)
    zz = (mm.value - tilt - tilt.T + np.outer(b, b)) / np.outer(a, a)
    tilts = [(np.outer(np.abs(b), error) + np.outer(error, np.abs(b))) for error in (m.stat, m.num)]
    stat, num = ((error + tilted) / np.outer(a, a) for error, tilted in zip((mm.stat, mm.num), tilts, strict=True))
    return _with_diagonal(Estimate((m.value - b) / a, m.stat / a, m.num / a, m.how), zz, stat, num, moments)


def apply_flips(moments: Moments, up_flips: ArrayLike, down_flips: ArrayLike) -> Moments:
    """Return the moments as a readout with independent flips would give them; `undo_flips` is the way back.

    With a = 1 - e0 - e1 and b = e1 - e0: a_i <Z_i> + b_i and
    a_i a_j <Z_i Z_j> + a_i b_j <Z_i> + b_i a_j <Z_j> + b_i b_j.
    """
    a, b = _response(moments.n_sites, up_flips, down_flips)
    z, zz = moments.z, moments.zz
    tilt = np.outer(b, a * z.value)
    value = zz.value * np.outer(a, a) + tilt + tilt.T + np.outer(b, b)
    tilts = [np.outer(np.abs(b), a * error) for error in (z.stat, z.num)]
    stat, num = (
        error * np.outer(a, a) + tilted + tilted.T for error, tilted in zip((zz.stat, zz.num), tilts, strict=True)
    )
    return _with_diagonal(Estimate(a * z.value + b, a * z.stat, a * z.num, z.how), value, stat, num, moments)


def _with_diagonal(
    z: Estimate, zz: NDArray[np.float64], stat: NDArray[np.float64], num: NDArray[np.float64], moments: Moments
) -> Moments:
    """Return moments with Z_i^2 = 1, which no readout changes."""
    np.fill_diagonal(zz, 1.0)
    np.fill_diagonal(stat, 0.0)
    np.fill_diagonal(num, np.diagonal(moments.zz.num))
    return Moments(z, Estimate(zz, stat, num, moments.zz.how), moments.x)


def _response(n: int, up_flips: ArrayLike, down_flips: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    rates = []
    for name, value in (("up_flips", up_flips), ("down_flips", down_flips)):
        rate = finite(name, value)
        if rate.shape not in ((), (n,)):
            raise InputError(f"{name} must be one rate or have shape ({n},); got shape {rate.shape}")
        if np.any((rate < 0) | (rate > 1)):
            raise InputError(f"{name} must be probabilities from 0 to 1; got {rate[(rate < 0) | (rate > 1)].flat[0]}")
        rates.append(np.broadcast_to(rate, (n,)))
    a = 1.0 - rates[0] - rates[1]
    if np.any(a <= 0):
        site = int(np.argmax(a <= 0))
        raise InputError(
            "up_flips + down_flips must be below 1, or the readout says nothing; "
            f"got {rates[0][site]} + {rates[1][site]} at site {site}"
        )
    return a, rates[1] - rates[0]
