"""What every back-end offers, what every state answers, and the border checks that they share."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol, Self, TypeAlias, runtime_checkable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.memory import readable_bytes
from anneal_ref.base.checks import integer, number
from anneal_ref.base.errors import InputError
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples

Kick: TypeAlias = tuple[float, int]
"""Z on a site at a fraction of the duration: (u, site)."""


@dataclass(frozen=True, slots=True)
class Plan:
    """What a run would cost, told before any of it is spent.

    Parameters
    ----------
    backend : str
        Class of the back-end.
    bytes : int
        Memory at the peak of the run.
    seconds : float
        Rough time of one run on one thread of a present-day core; a model, not a promise.
    steps, layers : int
        Time steps, and passes over the state.
    details : dict
        Everything else that the back-end has decided.
    """

    backend: str
    bytes: int
    seconds: float
    steps: int
    layers: int
    details: Mapping[str, Any] = field(default_factory=dict)

    def __str__(self) -> str:
        """Return one readable line, and one for the details."""
        text = (
            f"{self.backend}: {readable_bytes(self.bytes)}, about {_readable_seconds(self.seconds)} on one thread "
            f"({self.steps} steps, {self.layers} layers)"
        )
        return text + "".join(f"\n  {name}: {value}" for name, value in self.details.items())


@runtime_checkable
class State(Protocol):
    """The state of one anneal at one time; a `Source` that knows amplitudes."""

    anneal: Anneal
    at: float

    @property
    def ledger(self) -> dict[str, Any]:
        """Deterministic counters and consistency checks of the run; wall time beside them."""
        ...

    def moments(self) -> Moments:
        """Return <Z_i>, <Z_i Z_j> and <X_i>, `num` not measured."""
        ...

    def sample(self, shots: int, seed: int) -> Samples:
        """Return `shots` measurements in the Z basis."""
        ...

    def log_probability(self, spins: ArrayLike) -> NDArray[np.float64]:
        """Return the natural logarithm of the probability of each row of `spins` (shots, n_sites)."""
        ...

    def entropy(self, sites: Sequence[int]) -> float:
        """Return the von Neumann entropy, in nats, of the spins on `sites`."""
        ...


@runtime_checkable
class Backend(Protocol):
    """A frozen object with every setting that can change digits."""

    @property
    def knobs(self) -> tuple[str, ...]:
        """Names of the knobs that can be refined."""
        ...

    def plan(self, anneal: Anneal) -> Plan:
        """Return the cost of a run, or raise `NotSupported` or `TooLarge`."""
        ...

    def evolve(self, anneal: Anneal, at: float = 1.0, kicks: Sequence[Kick] = (), run: Run = ...) -> State:
        """Return the state at the fraction `at` of the duration."""
        ...

    def states(self, anneal: Anneal, at: Sequence[float], run: Run = ...) -> Iterator[State]:
        """Give the states at the ascending fractions `at`, in one pass of time."""
        ...

    def finer(self, knob: str) -> Self:
        """Return the back-end with one knob refined."""
        ...


def check_anneal(anneal: object) -> Anneal:
    """Return the anneal, or raise `InputError` if it is something else."""
    if not isinstance(anneal, Anneal):
        raise InputError(f"anneal must be an Anneal (instance, schedule, duration); got {type(anneal).__name__}")
    return anneal


def check_times(at: Sequence[float]) -> tuple[float, ...]:
    """Return strictly ascending fractions of the duration as floats, or raise `InputError`."""
    if isinstance(at, int | float):
        raise InputError(f"at must be a sequence of fractions of the duration, as in ({at},); got {at!r}")
    times = tuple(number(f"at[{k}]", u, 0.0, 1.0) for k, u in enumerate(at))
    if not times:
        raise InputError("at must hold at least one fraction of the duration; got none")
    for k in range(1, len(times)):
        if times[k] <= times[k - 1]:
            raise InputError(f"at must ascend strictly; got at[{k - 1}] = {times[k - 1]} before at[{k}] = {times[k]}")
    return times


def check_kicks(kicks: Sequence[Kick], n_sites: int, end: float = 1.0) -> tuple[Kick, ...]:
    """Return kicks as (float, int) pairs in ascending time up to `end`, or raise `InputError`."""
    checked: list[Kick] = []
    for k, kick in enumerate(kicks):
        try:
            u, site = kick
        except (TypeError, ValueError) as error:
            raise InputError(f"kicks[{k}] must be a pair (fraction of the duration, site); got {kick!r}") from error
        pair = (number(f"time of kicks[{k}]", u, 0.0, end), integer(f"site of kicks[{k}]", site, 0, n_sites - 1))
        if checked and pair[0] < checked[-1][0]:
            raise InputError(f"kicks must ascend in time; got {pair[0]} at kicks[{k}] after {checked[-1][0]}")
        checked.append(pair)
    return tuple(checked)


def refuse_checkpoint(run: Run, what: str) -> None:
    """Raise `InputError` if the run asks for a checkpoint, which `what` does not write."""
    if run.checkpoint is not None:
        raise InputError(
            f"{what} writes no checkpoint; got Run(checkpoint={run.checkpoint!r}): leave it out, or use MPS.evolve"
        )


def _readable_seconds(seconds: float) -> str:
    for limit, factor, unit in (
        (1.0, 1e3, "ms"),
        (120.0, 1.0, "s"),
        (7200.0, 1 / 60, "min"),
        (172800.0, 1 / 3600, "h"),
    ):
        if seconds < limit:
            return f"{seconds * factor:.2g} {unit}"
    return f"{seconds / 86400:.2g} days"
