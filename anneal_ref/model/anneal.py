"""`Anneal`: an instance, a schedule, a duration and a start, the one thing that gets solved; `Waveform`: s(t)."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import choice, finite, positive
from anneal_ref.base.errors import AnnealRefWarning, InputError
from anneal_ref.base.identity import digest
from anneal_ref.model.instances import Instance
from anneal_ref.model.piecewise import CLOSEST, Piecewise, inside
from anneal_ref.model.schedules import Schedule

SMALL_START = 0.05
"""Up to this ratio of problem to transverse energy at s = 0, `start="plus"` goes without a warning."""


@dataclass(frozen=True, slots=True, eq=False)
class Waveform:
    """How s runs through the anneal: a broken line s(u) over the fraction u = t/T of the duration.

    Equal values of s in a row are a pause; a steep last piece is a fast ending. A waveform may also go back.

    Parameters
    ----------
    u : array_like, shape (n,)
        Ascending strictly from 0 to 1. A jump in s would be infinitely fast and is refused.
    s : array_like, shape (n,)
        Within [0, 1], from 0 at the start to 1 at the end.

    Raises
    ------
    InputError

    Examples
    --------
    >>> pause = Waveform(u=[0, 0.4, 0.6, 1], s=[0, 0.5, 0.5, 1])
    >>> pause.at([0.2, 0.5]).tolist()
    [0.25, 0.5]
    """

    u: NDArray[np.float64]
    s: NDArray[np.float64]

    def __post_init__(self) -> None:
        """Check the points."""
        u, s = finite("u", self.u, (None,)), finite("s", self.s, (None,))
        if len(u) != len(s) or len(u) < 2:
            raise InputError(f"u and s must have the same length of at least 2; got {len(u)} and {len(s)}")
        steps = np.diff(u)
        if steps.min() < CLOSEST:
            k = int(np.flatnonzero(steps < CLOSEST)[0])
            hint = "; a jump needs a short ramp instead" if steps[k] >= 0 else ""
            raise InputError(
                f"u must ascend in steps of at least {CLOSEST:g}; got u[{k}] = {u[k]}, u[{k + 1}] = {u[k + 1]}{hint}"
            )
        for name, ends in (("u", u), ("s", s)):
            if ends[0] != 0 or ends[-1] != 1:
                raise InputError(f"{name} must start at 0 and end at 1; got {ends[0]} and {ends[-1]}")
        if s.min() < 0 or s.max() > 1:
            k = int(np.flatnonzero((s < 0) | (s > 1))[0])
            raise InputError(f"s must lie within [0, 1]; got s[{k}] = {s[k]}")
        object.__setattr__(self, "u", u)
        object.__setattr__(self, "s", s)

    def __reduce__(self) -> tuple[Any, ...]:
        """Pickle through the constructor, which makes the arrays read-only again."""
        return Waveform, (self.u, self.s)

    @property
    def is_straight(self) -> bool:
        """Whether s = u, as without a waveform."""
        return bool(np.array_equal(self.u, self.s))

    def at(self, u: ArrayLike) -> NDArray[np.float64]:
        """Return s at the fractions u of the duration, any shape."""
        return np.asarray(np.interp(inside(u), self.u, self.s))


@dataclass(frozen=True, slots=True, eq=False)
class Anneal:
    """One anneal: what evolves, under which schedule, for how long, from which state.

    Parameters
    ----------
    instance : Instance
    schedule : Schedule
    duration : float
        T, positive: ns if the schedule is in rad/ns, else in the schedule's own unit of time.
    start : {"plus", "ground"}
        |+...+>, the ground state of -sum X; or the ground state of H(0). If the problem is not small against the
        transverse field at s = 0, "plus" draws an `AnnealRefWarning`.
    waveform : Waveform, optional
        By default s = t/T; a waveform that says no more than that is left out.

    Raises
    ------
    InputError
        A duration that is not positive, or a start that is not known.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> instance = ar.draw_instance(ar.lattices.chain(4), ar.disorder.plus_minus(), seed=11)
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> anneal = ar.Anneal(instance, schedule, duration=7.0)
    >>> float(anneal.problem(3.5)), float(anneal.transverse_integral(0.0, 7.0))
    (5.0, 70.0)
    """

    instance: Instance
    schedule: Schedule
    duration: float
    start: str = "plus"
    waveform: Waveform | None = None
    _transverse: Piecewise = field(init=False, repr=False)
    _problem: Piecewise = field(init=False, repr=False)

    def __post_init__(self) -> None:
        """Check the parts and follow the schedule along the waveform."""
        for name, kind in (("instance", Instance), ("schedule", Schedule)):
            if not isinstance(getattr(self, name), kind):
                given = type(getattr(self, name)).__name__
                raise InputError(f"{name} must be {'an' if kind is Instance else 'a'} {kind.__name__}; got a {given}")
        if self.waveform is not None and not isinstance(self.waveform, Waveform):
            raise InputError(f"waveform must be a Waveform or None; got a {type(self.waveform).__name__}")
        object.__setattr__(self, "duration", positive("duration", self.duration, self.time_unit))
        object.__setattr__(self, "start", choice("start", self.start, ("plus", "ground")))
        transverse, problem = self.schedule.transverse_pieces, self.schedule.problem_pieces
        if self.waveform is not None and self.waveform.is_straight:
            # points on the straight line would be corners for the integrator, under the same identity
            object.__setattr__(self, "waveform", None)
        if self.waveform is not None:
            u, s = self.waveform.u, self.waveform.s
            transverse, problem = transverse.along(u, s), problem.along(u, s)
        object.__setattr__(self, "_transverse", transverse)
        object.__setattr__(self, "_problem", problem)
        if self.start == "plus":
            self._warn_if_not_ground()

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return self.instance.n_sites

    @property
    def time_unit(self) -> str:
        """Unit of the duration: "ns", or nothing for a dimensionless schedule."""
        return "ns" if self.schedule.unit == "rad/ns" else ""

    @property
    def knots(self) -> NDArray[np.float64]:
        """Times, from 0 to the duration, between which both strengths are polynomials in t."""
        return self.duration * self._transverse.breaks

    def transverse(self, t: ArrayLike) -> NDArray[np.float64]:
        """G at time t in [0, duration], any shape."""
        return self._transverse(self._fraction(t))

    def problem(self, t: ArrayLike) -> NDArray[np.float64]:
        """P at time t in [0, duration], any shape."""
        return self._problem(self._fraction(t))

    def transverse_integral(self, t0: ArrayLike, t1: ArrayLike) -> NDArray[np.float64]:
        """Exact integral of G over time from t0 to t1, shapes that broadcast; negative if t1 < t0."""
        return self.duration * self._transverse.integral(self._fraction(t0), self._fraction(t1))

    def problem_integral(self, t0: ArrayLike, t1: ArrayLike) -> NDArray[np.float64]:
        """Exact integral of P over time from t0 to t1, shapes that broadcast."""
        return self.duration * self._problem.integral(self._fraction(t0), self._fraction(t1))

    @property
    def identity(self) -> str:
        """SHA-256 of the content: identities of instance and schedule, duration, start, waveform."""
        return digest(
            {
                "anneal": 1,
                "instance": self.instance.identity,
                "schedule": self.schedule.identity,
                "duration": self.duration,
                "start": self.start,
                "waveform": _points(self.waveform),
            }
        )

    def to_dict(self) -> dict[str, Any]:
        """Return all content as plain data, from which `from_dict` makes the anneal again."""
        return {
            "instance": self.instance.to_dict(),
            "schedule": self.schedule.canonical_dict(),
            "duration": self.duration,
            "start": self.start,
            "waveform": _points(self.waveform),
        }

    @classmethod
    def from_dict(cls, content: Mapping[str, Any]) -> Anneal:
        """Make an anneal again from its `to_dict`."""
        waveform = content["waveform"]
        return cls(
            Instance.from_dict(content["instance"]),
            Schedule.from_dict(content["schedule"]),
            content["duration"],
            content["start"],
            None if waveform is None else Waveform(waveform["u"], waveform["s"]),
        )

    def describe(self) -> dict[str, str | int]:
        """Return a row for a table: instance, size, duration, schedule, start, waveform, start of the identity."""
        waveform = "straight" if self.waveform is None else f"{len(self.waveform.u)} points"
        return {
            "instance": self.instance.name,
            "sites": self.n_sites,
            "duration": f"{self.duration:g} {self.time_unit}".strip(),
            "schedule": self.schedule.describe()["schedule"],
            "start": self.start,
            "waveform": waveform,
            "identity": self.identity[:12],
        }

    def __repr__(self) -> str:
        """Return instance, duration and start in angle brackets."""
        bent = "" if self.waveform is None else ", waveform"
        return f"<Anneal {self.instance.name}: {self.describe()['duration']} from {self.start}{bent}>"

    def _fraction(self, t: ArrayLike) -> NDArray[np.float64]:
        return np.asarray(t, dtype=float) / self.duration

    def _warn_if_not_ground(self) -> None:
        instance = self.instance
        local = np.bincount(instance.lattice.edges.ravel(), np.abs(instance.couplings).repeat(2), instance.n_sites)
        local = local + np.abs(instance.fields)  # whole numbers where there is no edge at all
        problem = abs(float(self.schedule.problem(0.0))) * local
        transverse = float(self.schedule.transverse(0.0)) * self.instance.transverse
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = float(np.max(np.where(problem > 0, problem / transverse, 0.0)))
        if ratio > SMALL_START:
            warnings.warn(
                f"the start |+...+> is not the ground state of H(0): at s = 0 the problem energy of a spin is "
                f"{ratio:.3g} times its transverse energy (up to {SMALL_START:g} passes); "
                'give start="ground" unless this quench is meant',
                AnnealRefWarning,
                stacklevel=4,
            )


def _points(waveform: Waveform | None) -> dict[str, list[float]] | None:
    return None if waveform is None else {"u": waveform.u.tolist(), "s": waveform.s.tolist()}
