"""Standard normal numbers from raw words, the same to the last bit on every platform.

The inverse of the normal distribution is evaluated by Wichura's rational functions: additions, multiplications,
divisions and square roots, all of them correctly rounded by the IEEE 754 standard, and in the tails a logarithm, which
mathematical libraries round differently; there Python's `decimal` takes its place, which rounds correctly everywhere.

References
----------
Wichura, "Algorithm AS 241: the percentage points of the normal distribution", Appl. Statist. 37, 477 (1988), PPND16.
"""

from __future__ import annotations

from decimal import ROUND_HALF_EVEN, Context, Decimal

import numpy as np
from numpy.typing import NDArray

_CONTEXT = Context(prec=25, rounding=ROUND_HALF_EVEN)
_GRID = 2.0**32

_CENTRE = (
    (
        3.3871328727963666080e0, 1.3314166789178437745e2, 1.9715909503065514427e3, 1.3731693765509461125e4,
        4.5921953931549871457e4, 6.7265770927008700853e4, 3.3430575583588128105e4, 2.5090809287301226727e3,
    ),
    (
        1.0, 4.2313330701600911252e1, 6.8718700749205790830e2, 5.3941960214247511077e3,
        2.1213794301586595867e4, 3.9307895800092710610e4, 2.8729085735721942674e4, 5.2264952788528545610e3,
    ),
)  # fmt: skip
_TAIL = (
    (
        1.42343711074968357734e0, 4.63033784615654529590e0, 5.76949722146069140550e0, 3.64784832476320460504e0,
        1.27045825245236838258e0, 2.41780725177450611770e-1, 2.27238449892691845833e-2, 7.74545014278341407640e-4,
    ),
    (
        1.0, 2.05319162663775882187e0, 1.67638483018380384940e0, 6.89767334985100004550e-1,
        1.48103976427480074590e-1, 1.51986665636164571966e-2, 5.47593808499534494600e-4, 1.05075007164441684324e-9,
    ),
)  # fmt: skip
_FAR_TAIL = (
    (
        6.65790464350110377720e0, 5.46378491116411436990e0, 1.78482653991729133580e0, 2.96560571828504891230e-1,
        2.65321895265761230930e-2, 1.24266094738807843860e-3, 2.71155556874348757815e-5, 2.01033439929228813265e-7,
    ),
    (
        1.0, 5.99832206555887937690e-1, 1.36929880922735805310e-1, 1.48753612908506148525e-2,
        7.86869131145613259100e-4, 1.84631831751005468180e-5, 1.42151175831644588870e-7, 2.04426310338993978564e-15,
    ),
)  # fmt: skip


def standard_normal(words: NDArray[np.uint64]) -> NDArray[np.float64]:
    """Map words to normal numbers of mean 0 and variance 1, rounded to a multiple of 2^-32.

    A word w stands for the probability (floor(w / 2^11) + 1/2) / 2^53.

    Parameters
    ----------
    words : ndarray of uint64

    Returns
    -------
    ndarray of float64, same shape
    """
    # distance from the nearer end, in units of 2^-53: exact, so that the two tails mirror each other
    whole = (words >> np.uint64(11)).astype(np.int64)
    upper = whole >= 2**52
    from_end = (np.where(upper, 2**53 - 1 - whole, whole) + 0.5) * 2.0**-53
    q = 0.5 - from_end
    size = np.empty(words.shape)
    tail = q > 0.425
    size[~tail] = _central(q[~tail])
    size[tail] = _outer(from_end[tail])
    return np.where(upper, 1.0, -1.0) * np.round(size * _GRID) / _GRID + 0.0


def _central(q: NDArray[np.float64]) -> NDArray[np.float64]:
    return q * _ratio(_CENTRE, 0.180625 - q * q)


def _outer(probability: NDArray[np.float64]) -> NDArray[np.float64]:
    r = np.sqrt(np.array([-_log(float(p)) for p in probability]))
    return np.where(r <= 5.0, _ratio(_TAIL, r - 1.6), _ratio(_FAR_TAIL, r - 5.0))


def _log(p: float) -> float:
    return float(Decimal(p).ln(_CONTEXT))


def _ratio(coefficients: tuple[tuple[float, ...], tuple[float, ...]], x: NDArray[np.float64]) -> NDArray[np.float64]:
    numerator, denominator = (_horner(row, x) for row in coefficients)
    return numerator / denominator


def _horner(row: tuple[float, ...], x: NDArray[np.float64]) -> NDArray[np.float64]:
    result = np.full_like(x, row[-1])
    for c in row[-2::-1]:
        result = result * x + c
    return result
