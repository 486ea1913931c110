"""`Piecewise`: a piecewise polynomial on [0, 1] with exact integrals.

The pieces are kept in the Bernstein basis, because there a function that must not be negative is not negative to the
last bit, and its ends are exact.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from math import comb
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import BPoly, PchipInterpolator, PPoly

from anneal_ref.base.checks import frozen
from anneal_ref.base.errors import InputError

Floats = NDArray[np.float64]
_ROUNDING = 1e-12
CLOSEST = 1e-9
"""Breaks given by a user are at least this far apart."""


@dataclass(frozen=True, slots=True, eq=False)
class Piecewise:
    """A continuous function on [0, 1] that is a polynomial between its breaks.

    Parameters
    ----------
    breaks : ndarray, shape (n_pieces + 1,)
        Ascending from 0 to 1.
    controls : ndarray, shape (degree + 1, n_pieces)
        Bernstein coefficients of each piece over its own interval.
    """

    breaks: Floats
    controls: Floats
    _function: BPoly = field(init=False, repr=False)
    _primitive: PPoly = field(init=False, repr=False)

    def __post_init__(self) -> None:
        """Take copies and integrate."""
        object.__setattr__(self, "breaks", frozen(np.array(self.breaks, dtype=float)))
        object.__setattr__(self, "controls", frozen(np.array(self.controls, dtype=float)))
        object.__setattr__(self, "_function", BPoly(self.controls, self.breaks))
        # powers are twice as quick as the Bernstein basis, and an integral has no sign to keep
        object.__setattr__(self, "_primitive", PPoly.from_bernstein_basis(self._function.antiderivative()))

    def __reduce__(self) -> tuple[Any, ...]:
        """Pickle the numbers alone."""
        return Piecewise, (self.breaks, self.controls)

    def __call__(self, x: ArrayLike) -> Floats:
        """Return the values at x, any shape; x may leave [0, 1] by rounding alone."""
        return np.asarray(self._function(inside(x)))

    def integral(self, low: ArrayLike, high: ArrayLike) -> Floats:
        """Return the integrals from low to high, arrays of shapes that broadcast; negative if high < low."""
        return np.asarray(self._primitive(inside(high)) - self._primitive(inside(low)))

    def minimum(self) -> tuple[float, float]:
        """Return where the function is smallest, and its value there."""
        places = [self.breaks]
        for k, (left, right) in enumerate(zip(self.breaks[:-1], self.breaks[1:], strict=True)):
            inner = self.controls[1:-1, k]
            # a polynomial stays above the least of its Bernstein coefficients
            if inner.size and inner.min() < min(self.controls[0, k], self.controls[-1, k]):
                places.append(left + (right - left) * _extrema(self.controls[:, k]))
        x = np.concatenate(places)
        values = self(x)
        best = int(np.argmin(values))
        return float(x[best]), float(values[best])

    def along(self, u: Floats, s: Floats) -> Piecewise:
        """Return this function of s(u), where s is the broken line through the points (u, s).

        Parameters
        ----------
        u : ndarray, shape (n,)
            Ascending from 0 to 1.
        s : ndarray, shape (n,)
            Within [0, 1].
        """
        breaks: list[float] = [0.0]
        columns: list[Floats] = []
        for u0, u1, s0, s1 in zip(u[:-1], u[1:], s[:-1], s[1:], strict=True):
            low, high = min(s0, s1), max(s0, s1)
            inner = self.breaks[(self.breaks > low + _ROUNDING) & (self.breaks < high - _ROUNDING)]
            stops = np.concatenate([[s0], inner if s1 >= s0 else inner[::-1], [s1]])
            ends = [u0 + (u1 - u0) * (stop - s0) / (s1 - s0) for stop in stops[1:-1]] + [u1]
            for left, right, end in zip(stops[:-1], stops[1:], ends, strict=True):
                piece = int(np.searchsorted(self.breaks, (left + right) / 2, side="right")) - 1
                piece = min(piece, self.controls.shape[1] - 1)
                start, length = self.breaks[piece], self.breaks[piece + 1] - self.breaks[piece]
                x0, x1 = np.clip([(left - start) / length, (right - start) / length], 0.0, 1.0)
                columns.append(_restricted(self.controls[:, piece], x0, x1))
                breaks.append(float(end))
        return Piecewise(np.array(breaks), np.stack(columns, axis=1))


def power(coefficients: Floats) -> Piecewise:
    """Return the polynomial c[0] + c[1] s + c[2] s^2 + ..."""
    n = len(coefficients) - 1
    controls = [sum(comb(j, i) / comb(n, i) * coefficients[i] for i in range(j + 1)) for j in range(n + 1)]
    return Piecewise(np.array([0.0, 1.0]), np.array(controls)[:, None])


def broken_line(s: Floats, values: Floats) -> Piecewise:
    """Return the broken line through the points."""
    return Piecewise(s, np.stack([values[:-1], values[1:]]))


def monotone_cubic(s: Floats, values: Floats) -> Piecewise:
    """Return the cubic interpolation that rises and falls only where the points do.

    References
    ----------
    Fritsch and Carlson, SIAM J. Numer. Anal. 17, 238 (1980); slopes of Fritsch and Butland,
    SIAM J. Sci. Stat. Comput. 5, 300 (1984).
    """
    slopes = PchipInterpolator(s, values).derivative()(s)
    left, right, width = values[:-1], values[1:], np.diff(s)
    inner = np.stack([left + width * slopes[:-1] / 3, right - width * slopes[1:] / 3])
    # slopes keep the inner controls between the points; this takes away what rounding added
    inner = np.clip(inner, np.minimum(left, right), np.maximum(left, right))
    return Piecewise(s, np.stack([left, *inner, right]))


def inside(x: ArrayLike) -> Floats:
    """Return x as floats within [0, 1]; what leaves it by more than rounding raises `InputError`."""
    points = np.asarray(x, dtype=float)
    if points.size and not (points.min() >= -_ROUNDING and points.max() <= 1 + _ROUNDING):
        wrong = points[~((points >= -_ROUNDING) & (points <= 1 + _ROUNDING))].flat[0]
        raise InputError(f"a schedule is defined from its start (0) to its end (1); got {wrong} of the way")
    clipped: Floats = np.clip(points, 0.0, 1.0)
    return clipped


def _restricted(controls: Floats, x0: float, x1: float) -> Floats:
    """Return the Bernstein coefficients over [x0, x1] (or backwards) of a polynomial given over [0, 1]."""
    degree = len(controls) - 1
    return np.array([_blossom(controls, [x0] * (degree - j) + [x1] * j) for j in range(degree + 1)])


def _blossom(controls: Floats, points: Iterable[float]) -> float:
    """Evaluate the polar form by de Casteljau's scheme."""
    values = controls
    for x in points:
        values = (1 - x) * values[:-1] + x * values[1:]
    return float(values[0])


def _extrema(controls: Floats) -> Floats:
    """Return the places in (0, 1) where the derivative vanishes."""
    function = BPoly(controls[:, None], [0.0, 1.0])
    centred = np.polynomial.Chebyshev.interpolate(function.derivative(), len(controls) - 2, domain=[0.0, 1.0])
    roots = centred.trim(0.0).roots()
    real = roots.real[np.abs(roots.imag) < 1e-6]
    between: Floats = real[(real > 0) & (real < 1)]
    return between
