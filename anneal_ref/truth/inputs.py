"""`InputUncertainty`: how well the inputs of an anneal are known."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import finite, number
from anneal_ref.base.errors import InputError
from anneal_ref.model.anneal import Anneal

Several = float | tuple[float, ...]

_RELATIVE = {"transverse_scale": 0.5, "problem_scale": 0.5, "time_scale": 0.5, "weights": 0.1}
_INDEPENDENT = ("couplings", "fields", "weights")


@dataclass(frozen=True, slots=True)
class Uncertain:
    """One kind of input that is uncertain in a given anneal.

    Parameters
    ----------
    name : str
        As in `InputUncertainty`.
    stated : str
        Its standard uncertainty, to be read.
    keyword : str
        What `deviating` calls a deviation of it.
    steps : ndarray, shape (n_inputs,) or (n_inputs, size)
        Deviations that put one input off by its standard uncertainty.
    """

    name: str
    stated: str
    keyword: str
    steps: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class InputUncertainty:
    """Standard uncertainties of the inputs of an anneal, all 0 unless they are stated.

    Inputs of different names are independent of each other. See `anneal_ref.truth.deviations` for what each does to the
    Hamiltonian.

    Parameters
    ----------
    transverse_scale, problem_scale : float
        Relative, of the strength of G and of P as a whole; from 0 to 0.5 (1 % is 0.01).
    time_scale : float
        Relative, of the duration; from 0 to 0.5.
    time_offset : float
        Of the time by which P is ahead of G; in the unit of the duration, at least 0.
    couplings : float or array_like, shape (n_edges,)
        Absolute, in units of J, independent from edge to edge; one number holds for every edge of the lattice, those of
        zero coupling included.
    fields : float or array_like, shape (n_sites,)
        Absolute, independent from site to site.
    field_offset : float
        Absolute, common to all sites.
    weights : float or array_like, shape (n_sites,)
        Relative, of the transverse weights, independent from site to site; from 0 to 0.1.

    Raises
    ------
    InputError

    Examples
    --------
    >>> InputUncertainty(problem_scale=0.01, couplings=0.02)
    InputUncertainty(problem_scale=0.01, couplings=0.02)
    """

    transverse_scale: float = 0.0
    problem_scale: float = 0.0
    time_scale: float = 0.0
    time_offset: float = 0.0
    couplings: Several = 0.0
    fields: Several = 0.0
    field_offset: float = 0.0
    weights: Several = 0.0

    def __post_init__(self) -> None:
        """Check the numbers; arrays become tuples, so that it compares and hashes."""
        for item in fields(self):
            value = getattr(self, item.name)
            checked: Several
            if item.name in _INDEPENDENT and isinstance(value, Sequence | np.ndarray) and not isinstance(value, str):
                array = finite(item.name, value, (None,))
                checked = tuple(_one(item.name, v, f"[{k}]") for k, v in enumerate(array))
            else:
                checked = _one(item.name, value)
            object.__setattr__(self, item.name, checked)

    def of(self, anneal: Anneal) -> Iterator[Uncertain]:
        """Give what is uncertain in this anneal, kind by kind.

        Raises
        ------
        InputError
            Arrays that do not fit its lattice, an offset that is no shorter than its duration.
        """
        if self.time_offset >= anneal.duration:
            raise InputError(
                f"time_offset must be shorter than the duration, {anneal.duration:g}; got {self.time_offset:g}"
            )
        sizes = {"couplings": anneal.instance.n_edges, "fields": anneal.n_sites, "weights": anneal.n_sites}
        for item in fields(self):
            name, value = item.name, np.asarray(getattr(self, item.name))
            stated = _readable(name, value, anneal.time_unit)
            if name not in sizes:
                if value > 0:
                    yield Uncertain(name, stated, "fields" if name == "field_offset" else name, value[None])
                continue
            if value.shape not in ((), (sizes[name],)):
                what = "edge" if name == "couplings" else "site"
                raise InputError(
                    f"{name} must be one number or have shape ({sizes[name]},), one for each {what}; "
                    f"got shape {value.shape}"
                )
            each = np.broadcast_to(value, (sizes[name],))
            if each.any():
                yield Uncertain(name, stated, name, np.diag(each)[each > 0])

    def __repr__(self) -> str:
        """Return what is stated."""
        stated = ((item.name, getattr(self, item.name)) for item in fields(self))
        return f"InputUncertainty({', '.join(f'{name}={value!r}' for name, value in stated if np.any(value))})"


def _one(name: str, value: Any, place: str = "") -> float:
    high = _RELATIVE.get(name)
    try:
        return number(name + place, value, 0.0, high)
    except InputError as error:
        if high is None:
            raise
        raise InputError(f"{error}; it is a relative standard uncertainty, so 1 % is 0.01") from error


def _readable(name: str, value: NDArray[np.float64], time_unit: str) -> str:
    factor, unit = (100.0, " %") if name in _RELATIVE else (1.0, f" {time_unit}".rstrip() if "time" in name else "")
    ends = [f"{factor * end:.3g}" for end in (np.min(value, initial=np.inf), np.max(value, initial=0.0))]
    return (ends[0] if ends[0] == ends[1] else " to ".join(ends)) + unit
