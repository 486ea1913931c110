"""`Estimate` and `Score`: no number without its error and the reason for it."""

from __future__ import annotations

from dataclasses import dataclass
from statistics import NormalDist
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite, frozen, number
from anneal_ref.base.errors import InputError


@dataclass(frozen=True, slots=True, eq=False)
class Estimate:
    """A value, or an array of values, with its statistical and its numerical error.

    The two kinds add up differently. Statistical errors of independent data add in quadrature; a numerical error is
    a bound (about 95 %) on a systematic displacement and adds linearly.

    Parameters
    ----------
    value : array_like, any shape
        The numbers; finite.
    stat : array_like, broadcast to the shape of `value`
        One standard error; 0 where the number is not from random data.
    num : array_like, broadcast to the shape of `value`
        Bound on the numerical error, measured by refinement; `nan` where it was not measured. It is never 0 unless
        the number is exact.
    how : str
        A word on where the number comes from.

    Raises
    ------
    InputError
        A value that is not finite, a negative error, a statistical error that is not finite, shapes that do not fit.

    Examples
    --------
    >>> energy = Estimate(-12.25, stat=0.03, num=0.002, how="samples")
    >>> print(energy)
    -12.25 ± 0.03 (stat) ± 0.002 (num)
    >>> energy.interval(0.95)
    (array(-12.3108), array(-12.1892))
    """

    value: NDArray[np.float64]
    stat: NDArray[np.float64]
    num: NDArray[np.float64]
    how: str

    def __init__(self, value: ArrayLike, stat: ArrayLike = 0.0, num: ArrayLike = np.nan, how: str = "computed") -> None:
        values = finite("value", value)
        object.__setattr__(self, "value", values)
        object.__setattr__(self, "stat", _errors("stat", stat, values.shape, nan=False))
        object.__setattr__(self, "num", _errors("num", num, values.shape, nan=True))
        object.__setattr__(self, "how", str(how))

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the value and of both errors."""
        return self.value.shape

    def half_width(self, level: float = 0.95) -> NDArray[np.float64]:
        """Half the width of the joint interval: normal quantile times `stat`, plus `num` (`nan` where not measured)."""
        level = number("level", level, 0.0, 1.0)
        if level in (0.0, 1.0):
            raise InputError(f"level must lie strictly between 0 and 1; got {level}")
        quantile = NormalDist().inv_cdf(0.5 + level / 2)
        return np.asarray(quantile * self.stat + self.num)

    def interval(self, level: float = 0.95) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Lower and upper end of the joint interval at the given level."""
        half = self.half_width(level)
        return np.asarray(self.value - half), np.asarray(self.value + half)

    def scaled(self, factor: float) -> Estimate:
        """Return the estimate of `factor` times this quantity."""
        factor = number("factor", factor)
        return Estimate(self.value * factor, self.stat * abs(factor), self.num * abs(factor), self.how)

    def __getitem__(self, index: Any) -> Estimate:
        """Return the estimate of one entry or a slice."""
        return Estimate(self.value[index], self.stat[index], self.num[index], self.how)

    def __float__(self) -> float:
        """Return the value of a scalar estimate."""
        return float(self.value)

    def __str__(self) -> str:
        """Return value and errors; an array is summarised with its largest errors."""
        if self.value.ndim:
            text = f"{'x'.join(map(str, self.shape))} values"
            if not self.value.size:
                return text
            stat, num = float(self.stat.max()), float(self.num.max())
            return f"{text}, stat ≤ {stat:.2g}, num {'not measured' if np.isnan(num) else f'≤ {num:.2g}'}"
        return _scalar_text(float(self.value), float(self.stat), float(self.num))

    def __repr__(self) -> str:
        """Return the readable form in angle brackets."""
        return f"<Estimate {self} [{self.how}]>"


@dataclass(frozen=True, slots=True, eq=False)
class Score:
    """A figure of merit: an estimate, its confidence interval, its noise floor and its disorder error.

    Parameters
    ----------
    name : str
    estimate : Estimate
        Scalar. Its `stat` is the shot error.
    low, high : float
        Ends of the confidence interval (it need not be symmetric about the value).
    level : float
        The level of the interval, between 0 and 1.
    floor : Estimate, optional
        What a perfect processor attains with the same number of shots.
    disorder : float, optional
        Standard error from the finite number of instances, kept apart from the shot error; 0 where the scatter between
        instances is no more than shots make.
    unit : str
        Unit of the value; empty where it is 1.
    """

    name: str
    estimate: Estimate
    low: float
    high: float
    level: float = 0.95
    floor: Estimate | None = None
    disorder: float | None = None
    unit: str = ""

    @property
    def value(self) -> float:
        """The value alone."""
        return float(self.estimate)

    def __str__(self) -> str:
        """Return name, value, interval and floor on one line."""
        unit = f" {self.unit}" if self.unit else ""
        text = f"{self.name}: {self.value:.4g}{unit} ({self.level:.0%} interval {self.low:.4g} to {self.high:.4g}"
        if self.disorder is not None:
            text += f", disorder ± {self.disorder:.2g}" if self.disorder else ", disorder error below the shot noise"
        if self.floor is not None:
            text += f", perfect processor {float(self.floor):.4g}"
        return text + ")"


def _errors(name: str, value: ArrayLike, shape: tuple[int, ...], nan: bool) -> NDArray[np.float64]:
    array = np.array(value, dtype=np.float64)
    try:
        array = np.array(np.broadcast_to(array, shape))
    except ValueError as error:
        raise InputError(f"{name} must have the shape of value, {shape}; got shape {array.shape}") from error
    wrong = (array < 0) | np.isinf(array) | (np.isnan(array) & (not nan))
    if wrong.any():
        allowed = "finite and not negative" + (", or nan where it was not measured" if nan else "")
        raise InputError(f"{name} must be {allowed}; got {array[wrong].flat[0]}")
    return frozen(array)


def _scalar_text(value: float, stat: float, num: float) -> str:
    errors = [error for error in (stat, num) if error > 0]
    if errors:
        places = max(0, 1 - int(np.floor(np.log10(max(errors)))))
        # one digit beyond the leading digit of the larger error, without trailing noise
        text = f"{value:.{places}f}"
        text = text.rstrip("0").rstrip(".") if "." in text else text
    else:
        text = f"{value:.10g}"
    if stat:
        text += f" ± {stat:.2g} (stat)"
    if np.isnan(num):
        return text + ", numerical error not measured"
    return text + (f" ± {num:.2g} (num)" if num else ("" if stat else " (exact)"))
