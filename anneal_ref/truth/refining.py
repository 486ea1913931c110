"""Which runs are made for a reference, one after the other, and when it is enough."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from time import perf_counter

from anneal_ref.backends.contract import Backend, Plan, State
from anneal_ref.backends.memory import readable_bytes
from anneal_ref.base.checks import number, positive
from anneal_ref.base.errors import InputError, TooLarge
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal
from anneal_ref.truth.errors import RUNS, errors_of, measured_moments
from anneal_ref.truth.evolutions import Evolution, refined, solve_reordered

MET, MOST_RUNS = "tolerance met", "all runs made"


@dataclass(frozen=True, slots=True)
class Budget:
    """What a reference may cost; a run that would go beyond is not begun.

    Parameters
    ----------
    seconds : float, optional
        Wall time of all runs together; unlimited if None.
    bytes : float, optional
        Memory of one run; what is free if None.

    Examples
    --------
    >>> Budget(seconds=60)
    Budget(seconds=60.0, bytes=None)
    """

    seconds: float | None = 3600.0
    bytes: float | None = None

    def __post_init__(self) -> None:
        """Check the limits."""
        for name in ("seconds", "bytes"):
            value = getattr(self, name)
            if value is not None:
                object.__setattr__(self, name, positive(name, value))

    @classmethod
    def of(cls, given: Budget | float | None) -> Budget:
        """Return a budget; a number is one of seconds, and None the default."""
        if given is None:
            return cls()
        if isinstance(given, Budget):
            return given
        if isinstance(given, bool) or not isinstance(given, int | float):
            raise InputError(f"budget must be a number of seconds or a Budget(seconds, bytes); got {given!r}")
        return cls(seconds=number("budget", given))


def first_runs(backend: Backend) -> list[dict[str, int]]:
    """Return what is refined in every run that is made in any case, beginning with the coarsest."""
    if "bond_dimension" not in backend.knobs:
        return [{"step": k} for k in range(RUNS)]
    ladder = [{"bond_dimension": k} for k in range(RUNS)]
    middle = ladder[-2]
    return [*ladder, {**middle, "step": 1}, {**middle, "rounding": 1}]


def plan_reference(anneal: Anneal, backend: Backend) -> tuple[Plan, float]:
    """Return the plan of the largest of the first runs, and the seconds of all of them.

    Raises
    ------
    NotSupported, TooLarge
        The back-end cannot solve the anneal on this machine.
    """
    plans = [refined(backend, counts).plan(anneal) for counts in first_runs(backend)]
    # one knob: the coarsest run comes twice, once reordered
    again = 0.0 if "bond_dimension" in backend.knobs else plans[0].seconds
    return max(plans, key=lambda plan: plan.seconds), again + sum(plan.seconds for plan in plans)


@dataclass(slots=True)
class Refining:
    """The runs of one reference, as they are made.

    Parameters
    ----------
    anneal : Anneal
    backend : Backend
        Settings of the coarsest run.
    tolerance : float
    max_runs : int
        The most values of one knob.
    budget : Budget
    run : Run

    Attributes
    ----------
    runs : list of Evolution
    state : State
        Of the final run.
    stopped : str
        Why no more runs were made.
    """

    anneal: Anneal
    backend: Backend
    tolerance: float
    max_runs: int
    budget: Budget
    run: Run
    runs: list[Evolution] = field(default_factory=list)
    state: State | None = None
    stopped: str = ""
    _began: float = field(default_factory=perf_counter)
    _pace: float = 1.0

    def go(self) -> None:
        """Make runs until the tolerance is met or something runs out; the first few are made whatever they cost."""
        if "bond_dimension" in self.backend.knobs:
            self._go_grid()
            for run in self.runs:
                self._run_of(run.refined).forget()
        else:
            self._go_nested()

    def _go_nested(self) -> None:
        self.runs.append(solve_reordered(self.anneal, self.backend, self._run_of({})))
        for k in range(self.max_runs):
            if k >= RUNS and (obstacle := self._obstacle({"step": k})) is not None:
                self.stopped = obstacle
                return
            self._solve({"step": k}, keep=True)
            if k >= RUNS - 1 and self._met():
                return
        self.stopped = MOST_RUNS

    def _go_grid(self) -> None:
        place = {"bond_dimension": RUNS - 1, "step": 0}
        for counts in first_runs(self.backend):
            self._solve(counts, keep=counts == {"bond_dimension": RUNS - 1})
        while not self._met():
            options = [(self._obstacle(counts), counts, final) for counts, final in self._options(place)]
            possible = [(counts, final) for obstacle, counts, final in options if obstacle is None]
            if not possible:
                self.stopped = str(options[0][0])
                return
            counts, final = possible[0]
            if counts.get("rounding") and not self._has(untightened := {**counts, "rounding": 0}):
                self._solve(untightened)
            self._solve(counts, keep=final)
            place = counts if final else place

    def _options(self, place: dict[str, int]) -> list[tuple[dict[str, int], bool]]:
        """Return what to solve next, best first, and whether its numbers would be reported; `place` are those now."""
        parts = self._largest()
        much = self.tolerance / 4
        wider = _more(place, "bond_dimension"), True
        # a heavily truncated pair of runs differs by more than what it is asked about: ask the best that can be had
        pair = {**place, "bond_dimension": place["bond_dimension"] - 1}
        asked = [_more(pair, knob) for knob in ("step", "rounding") if parts[knob] > much]
        checks = [(counts, False) for counts in asked if not self._has(counts)]
        if parts["truncation"] > self.tolerance / 2:
            return [wider, *checks]
        if checks:
            return [*checks, wider]
        if parts["step"] > max(parts["truncation"], much):
            return [(_more(place, "step"), True), wider]
        return [wider]

    def _solve(self, counts: Mapping[str, int], keep: bool = False) -> None:
        backend = refined(self.backend, counts)
        if keep:
            # before the next one is allocated
            self.state = None
        planned, began = backend.plan(self.anneal).seconds, perf_counter()
        state = backend.evolve(self.anneal, run=self._run_of(counts))
        self._pace = (perf_counter() - began) / max(planned, 1e-9)
        self.runs.append(Evolution.of(state, counts))
        if keep:
            self.state = state

    def _run_of(self, counts: Mapping[str, int]) -> Run:
        """Return the run with a checkpoint of its own; the exact back-ends are quick, and keep none."""
        if "bond_dimension" not in self.backend.knobs:
            return replace(self.run, checkpoint=None)
        return self.run.part("-".join(["run", *(f"{knob}-{count}" for knob, count in counts.items() if count)]))

    def _obstacle(self, counts: Mapping[str, int]) -> str | None:
        """Return why a run cannot be made within what is left, None if it can."""
        if max(counts.values()) >= self.max_runs:
            return MOST_RUNS
        try:
            plan = refined(self.backend, counts).plan(self.anneal)
        except TooLarge as error:
            return f"out of memory: {error}"
        seconds, spent = plan.seconds * self._pace, perf_counter() - self._began
        if self.budget.bytes is not None and plan.bytes > self.budget.bytes:
            needed, allowed = readable_bytes(plan.bytes), readable_bytes(self.budget.bytes)
            return f"out of the budget: the next run needs {needed}, {allowed} are allowed"
        if self.budget.seconds is not None and spent + seconds > self.budget.seconds:
            return (
                f"out of the budget: {spent:.3g} s are spent, the next run takes about {seconds:.3g} s, "
                f"{self.budget.seconds:.3g} s are allowed"
            )
        return None

    def _has(self, counts: Mapping[str, int]) -> bool:
        wanted = {knob: count for knob, count in counts.items() if count}
        return any(dict(run.refined) == wanted and not run.reordered for run in self.runs)

    def _largest(self) -> dict[str, float]:
        return measured_moments(self.anneal, self.runs, errors_of(self.anneal, self.runs))[1]

    def _met(self) -> bool:
        errors = errors_of(self.anneal, self.runs)
        moments, _ = measured_moments(self.anneal, self.runs, errors)
        met = errors.settled and max(moments.z.num.max(), moments.zz.num.max()) <= self.tolerance
        if met:
            self.stopped = MET
        return bool(met)


def _more(counts: Mapping[str, int], knob: str) -> dict[str, int]:
    return {**counts, knob: counts.get(knob, 0) + 1}
