"""Disorder laws: frozen objects that map raw words to couplings, fields or transverse weights.

| law | values |
| --- | --- |
| `plus_minus()` | +1 or -1, equally likely |
| `gaussian(sigma)` | normal, mean 0, standard deviation sigma; the standard normal is rounded to 2^-32 |
| `uniform(low, high)` | uniform in [low, high) |
| `levels(k, zero)` | +-1/k, +-2/k, ..., +-1, equally likely; 0 as well if `zero` |
| `constant(value)` | the value |

The same law, seed, index and stream give the same digits on every platform and with every version of numpy; member n
of a draw is made from word n, so a longer draw begins with the shorter one. Tests freeze the values.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import integer, number, positive
from anneal_ref.base.errors import InputError
from anneal_ref.model.normal import standard_normal
from anneal_ref.model.words import below, raw_words, unit_interval

__all__ = [
    "Constant", "Gaussian", "Law", "Levels", "PlusMinus", "Uniform", "constant", "gaussian", "levels", "plus_minus",
    "uniform",
]  # fmt: skip


class Law(Protocol):
    """Anything that draws `n` independent numbers; streams are "couplings", "fields" and "transverse"."""

    def draw(self, n: int, seed: int, index: int, stream: str) -> NDArray[np.float64]:
        """Return n finite numbers, always the same ones for the same arguments."""
        ...


@dataclass(frozen=True, slots=True)
class PlusMinus:
    """+1 or -1 with equal probability."""

    def draw(self, n: int, seed: int, index: int, stream: str) -> NDArray[np.float64]:
        """Return n signs: +1 where the top bit of the word is 1."""
        return 2.0 * (raw_words(n, seed, index, stream) >> np.uint64(63)).astype(np.float64) - 1.0


@dataclass(frozen=True, slots=True)
class Gaussian:
    """Normal with mean 0.

    Parameters
    ----------
    sigma : float
        Standard deviation, positive. It multiplies a standard normal that is rounded to a multiple of 2^-32.
    """

    sigma: float = 1.0

    def __post_init__(self) -> None:
        """Check the parameter."""
        object.__setattr__(self, "sigma", positive("sigma", self.sigma))

    def draw(self, n: int, seed: int, index: int, stream: str) -> NDArray[np.float64]:
        """Return n normal numbers."""
        return self.sigma * standard_normal(raw_words(n, seed, index, stream))


@dataclass(frozen=True, slots=True)
class Uniform:
    """Uniform in [low, high), in steps of (high - low) / 2^53 rounded to floats; never `high` itself."""

    low: float
    high: float

    def __post_init__(self) -> None:
        """Check the parameters."""
        object.__setattr__(self, "low", number("low", self.low))
        object.__setattr__(self, "high", number("high", self.high))
        if not self.low < self.high:
            raise InputError(f"low must be below high; got {self.low} and {self.high}; use constant(v) for one value")
        if not np.isfinite(self.high - self.low):
            raise InputError(f"high - low must be a finite number; got {self.low} and {self.high}; use a narrower law")

    def draw(self, n: int, seed: int, index: int, stream: str) -> NDArray[np.float64]:
        """Return n uniform numbers."""
        drawn = self.low + (self.high - self.low) * unit_interval(raw_words(n, seed, index, stream))
        # the sum may round up to the end that does not belong to the law
        return np.minimum(drawn, np.nextafter(self.high, self.low))


@dataclass(frozen=True, slots=True)
class Levels:
    """Equally spaced levels of both signs, as a device with few bits of resolution has them.

    Parameters
    ----------
    k : int
        Levels of each sign: 1/k, 2/k, ..., 1 and their opposites, all equally likely. `levels(1)` has the values of
        `plus_minus()`.
    zero : bool
        Whether 0 is one more level, as likely as each of the others.
    """

    k: int
    zero: bool = False

    def __post_init__(self) -> None:
        """Check the parameters."""
        object.__setattr__(self, "k", integer("k", self.k, low=1, high=2**20))
        if not isinstance(self.zero, bool | np.bool_):
            raise InputError(f"zero must be True or False; got {self.zero!r}")

    def draw(self, n: int, seed: int, index: int, stream: str) -> NDArray[np.float64]:
        """Return n levels."""
        step = below(2 * self.k + int(self.zero), raw_words(n, seed, index, stream)) - self.k
        if not self.zero:
            step += step >= 0
        return step / float(self.k)


@dataclass(frozen=True, slots=True)
class Constant:
    """One value everywhere."""

    value: float

    def __post_init__(self) -> None:
        """Check the parameter."""
        object.__setattr__(self, "value", number("value", self.value))

    def draw(self, n: int, seed: int, index: int, stream: str) -> NDArray[np.float64]:
        """Return the value n times, whatever the seed."""
        return np.full(n, self.value)


def plus_minus() -> PlusMinus:
    """Return the law of random signs.

    Examples
    --------
    >>> plus_minus().draw(6, seed=11, index=0, stream="couplings").tolist()
    [-1.0, 1.0, 1.0, 1.0, 1.0, -1.0]
    """
    return PlusMinus()


def gaussian(sigma: float = 1.0) -> Gaussian:
    """Return the normal law of mean 0 and standard deviation sigma."""
    return Gaussian(sigma)


def uniform(low: float, high: float) -> Uniform:
    """Return the uniform law on [low, high)."""
    return Uniform(low, high)


def levels(k: int, zero: bool = False) -> Levels:
    """Return the law of k equally spaced levels of each sign; see `Levels`."""
    return Levels(k, zero)


def constant(value: float) -> Constant:
    """Return the law of one value."""
    return Constant(value)
