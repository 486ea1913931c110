"""`reference`: what the Schrodinger equation says for one anneal, and how wrong that number can be."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.contract import Backend, State, check_anneal
from anneal_ref.base.checks import frozen, integer, number, signs
from anneal_ref.base.errors import InputError, NotConverged
from anneal_ref.base.estimate import Estimate
from anneal_ref.base.identity import digest
from anneal_ref.base.provenance import provenance
from anneal_ref.base.run import Run
from anneal_ref.ground.ground import GroundEnergy, ground_energy
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.bits import unpack
from anneal_ref.observe.evaluating import evaluate
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples
from anneal_ref.truth.choosing import choose_backend, second_backend
from anneal_ref.truth.errors import RUNS, Errors, errors_of, measured_moments
from anneal_ref.truth.evolutions import Evolution, refined
from anneal_ref.truth.opinions import Opinion
from anneal_ref.truth.refining import MET, Budget, Refining, plan_reference

LARGEST_TABLE = 16
"""Sites up to which a reference keeps the probability of every configuration."""


@dataclass(frozen=True, slots=True, eq=False)
class Reference:
    """Truth for one anneal: moments with a measured error, samples, and all that it takes to check them.

    Made by `reference`, or read from an archive. It is a `Source`.

    Attributes
    ----------
    anneal : Anneal
    backend : Backend
        Settings of the coarsest run; `finest` has those of the last.
    tolerance : float
        What was asked for: the largest absolute error over all <Z_i> and <Z_i Z_j>.
    seed : int
        Of the stored samples.
    max_runs : int
        The most values of one knob that were allowed.
    budget : Budget
        What it was allowed to cost.
    runs : tuple of Evolution
        In the order in which they were made; each tells what was refined in it. `errors.final` is the one whose numbers
        are reported.
    bits : ndarray of uint8, shape (n_samples, ceil(n_sites/8))
        The stored samples, packed.
    folded : ndarray of float64, shape (2^n,) or (2^(n-1),), optional
        Probabilities at the end, up to 16 sites. With the spin-flip symmetry, the half with the last spin up.
    ground : GroundEnergy
        The classical ground energy of the instance.
    stopped : str
        Why no more runs were made.
    second : Opinion, optional
        What a back-end that shares no evolution code says.
    provenance : mapping of str to str
        Versions, machine and time.
    errors : Errors
        How the errors are measured from the runs; see `anneal_ref.truth.errors`.
    parts : mapping of str to float
        The largest error over all <Z_i> and <Z_i Z_j> from every source: "step", "truncation", "rounding".
    """

    anneal: Anneal
    backend: Backend
    tolerance: float
    seed: int
    max_runs: int
    budget: Budget
    runs: tuple[Evolution, ...]
    bits: NDArray[np.uint8]
    folded: NDArray[np.float64] | None
    ground: GroundEnergy
    stopped: str = MET
    second: Opinion | None = None
    provenance: Mapping[str, str] = field(default_factory=provenance)
    errors: Errors = field(init=False)
    parts: Mapping[str, float] = field(init=False)
    _moments: Moments = field(init=False, repr=False)

    def __post_init__(self) -> None:
        """Measure the errors from the runs."""
        put = object.__setattr__
        put(self, "errors", errors_of(self.anneal, self.runs))
        moments, parts = measured_moments(self.anneal, self.runs, self.errors)
        put(self, "_moments", moments)
        put(self, "parts", parts)

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return self.anneal.n_sites

    @property
    def error(self) -> float:
        """Largest measured error over all <Z_i> and <Z_i Z_j>."""
        return float(max(self._moments.z.num.max(), self._moments.zz.num.max()))

    @property
    def settled(self) -> bool:
        """Whether the changes shrink as the runs are refined; where they do not, the error is no more than a guess."""
        return self.errors.settled

    @property
    def outcome(self) -> str:
        """Either "converged", "not converged", or "disagreement" with the second opinion."""
        if self.second is not None and self.second.disagrees:
            return "disagreement"
        return "converged" if self.settled and self.error <= self.tolerance else "not converged"

    @property
    def identity(self) -> str:
        """Name of the reference: 32 hexadecimal digits of the anneal, a hyphen, 16 of what else changes digits."""
        return identity_of(
            self.anneal, self.backend, self.tolerance, len(self.bits), self.seed, self.max_runs, self.budget,
            self.second is not None,
        )  # fmt: skip

    @property
    def finest(self) -> Backend:
        """The back-end as the run used it whose numbers are reported."""
        return refined(self.backend, self.runs[self.errors.final].refined)

    @property
    def ledger(self) -> Mapping[str, Any]:
        """Counters and checks of the run whose numbers are reported."""
        return self.runs[self.errors.final].ledger

    @property
    def rounding(self) -> float:
        """Bound on the rounding error of an entry, as it was measured."""
        return max(self.parts["rounding"], self.errors.model.level)

    def probabilities(self) -> NDArray[np.float64] | None:
        """Return the probabilities of all configurations at the end, shape (2^n,), or None beyond 16 sites."""
        if self.folded is None or len(self.folded) == 1 << self.n_sites:
            return self.folded
        return frozen(np.concatenate((self.folded, self.folded[::-1])))

    @property
    def stored_samples(self) -> Samples:
        """The samples of the truth that the reference keeps."""
        return Samples(unpack(self.bits, self.n_sites), self._manifest())

    def moments(self) -> Moments:
        """Return the moments of the finest run, each with its measured error in `num`."""
        return self._moments

    def estimate(self, f: Callable[[Moments], ArrayLike]) -> Estimate:
        """Return f(moments) with an error measured in the same way: f is evaluated on every run.

        Parameters
        ----------
        f : callable
            A plain function of `Moments`, such as those of `anneal_ref.observables`; gives a number or an array.

        Returns
        -------
        Estimate
            Errors of entries that depend on each other are taken together, not added up.

        Raises
        ------
        InputError
            Values that are no finite numbers, or of different shapes.
        """
        values = [evaluate(f, run.moments) for run in self.runs]
        if any(value.shape != values[0].shape or not np.isfinite(value).all() for value in values):
            raise InputError("f must give finite numbers of one shape for the moments of every run; got something else")
        return Estimate(values[self.errors.final], 0.0, self.errors.bars(values), "reference")

    def sample(self, shots: int, seed: int) -> Samples:
        """Return `shots` measurements of the truth, the same ones for the same seed.

        Up to 16 sites they are drawn from the stored probabilities. Beyond, they are taken from the stored samples
        without repeats.

        Raises
        ------
        InputError
            More shots than are stored, where there are no probabilities.
        """
        shots, seed = integer("shots", shots, low=1), integer("seed", seed, low=0)
        random = np.random.default_rng(seed)
        if self.folded is None:
            if shots > len(self.bits):
                raise InputError(
                    f"shots must be at most {len(self.bits)}, the number of samples that are kept; got {shots}; "
                    "for more use reference.state().sample(shots, seed), which evolves the state again"
                )
            chosen = random.permutation(len(self.bits))[:shots]
            return Samples(unpack(self.bits[chosen], self.n_sites), self._manifest())
        cumulative = np.cumsum(self.folded)
        index = np.searchsorted(cumulative, random.random(shots) * cumulative[-1], side="right")
        spins = (1 - 2 * ((index[:, None] >> np.arange(self.n_sites)) & 1)).astype(np.int8)
        if len(self.folded) < 1 << self.n_sites:
            spins *= (1 - 2 * random.integers(0, 2, (shots, 1))).astype(np.int8)
        return Samples(spins, self._manifest())

    def log_probability(self, spins: ArrayLike) -> NDArray[np.float64]:
        """Return the natural logarithm of the probability of each row of `spins`, -inf where it is zero.

        From the stored probabilities up to 16 sites; beyond, the state is evolved again.

        Parameters
        ----------
        spins : array_like of +1 and -1, shape (shots, n_sites)

        Returns
        -------
        ndarray, shape (shots,)
        """
        rows = signs("spins", spins, (None, self.n_sites))
        table = self.probabilities()
        if table is None:
            return self.state().log_probability(rows)
        with np.errstate(divide="ignore"):
            return np.log(table[(rows < 0) @ (1 << np.arange(self.n_sites))])

    def state(self, run: Run = Run()) -> State:  # noqa: B008
        """Evolve the finest run again and return its state."""
        return self.finest.evolve(self.anneal, run=run)

    def __repr__(self) -> str:
        """Return the outcome in angle brackets."""
        return f"<Reference {self.identity[:12]}: {self.n_sites} spins, {self.outcome}, error {self.error:.2g}>"

    def __str__(self) -> str:
        """Return a small table of the runs, the error and the outcome."""
        moments = self._moments
        lines = [
            f"reference for {self.n_sites} spins, duration {self.anneal.duration:g}: {self.outcome}",
            f"  largest error {self.error:.2g} (z {moments.z.num.max():.2g}, zz {moments.zz.num.max():.2g}), "
            f"tolerance {self.tolerance:g}",
            f"  back-end {self.backend}",
            f"  {'run':<24}{'steps':>8}{'layers':>9}{'change':>10}{'norm drift':>12}",
        ]
        first = self.runs[0].moments
        for run in self.runs:
            change = "-" if run is self.runs[0] else f"{_change(first, run.moments):.2g}"
            steps, layers = (str(run.ledger.get(name, "-")) for name in ("steps", "layers"))
            drift = f"{run.ledger['norm_drift']:.1e}" if "norm_drift" in run.ledger else "-"
            lines.append(f"  {_label(run):<24}{steps:>8}{layers:>9}{change:>10}{drift:>12}")
        sources = ", ".join(f"{name} {error:.2g}" for name, error in self.parts.items())
        lines.append(f"  error by source: {sources}{'' if self.settled else ' (not settled)'}; {self.stopped}")
        if self.second is not None:
            lines.append(f"  {self.second}")
        lines.append(f"  ground energy {self.ground}; {len(self.bits)} samples kept")
        return "\n".join(lines)

    def _manifest(self) -> Manifest:
        return Manifest(instance=self.anneal.instance.identity, duration=self.anneal.duration, source="reference")


def reference(
    anneal: Anneal,
    tolerance: float = 1e-3,
    backend: Backend | None = None,
    samples: int = 16384,
    seed: int = 0,
    max_runs: int = 6,
    budget: Budget | float | None = None,
    independent: bool = False,
    strict: bool = False,
    run: Run = Run(),  # noqa: B008
) -> Reference:
    """Solve an anneal and measure how wrong the result can be.

    The state vector and free fermions are solved with the step halved from one run to the next, three times at least,
    which shows how the error decays, and once more with the sites reordered, which shows the rounding. A matrix product
    state is solved with three bond dimensions, each twice the one before, and apart from that with half the step and
    with less rounding. More runs follow while the measured error is above the tolerance, of the knob that matters most.
    Every <Z_i>, <Z_i Z_j> and <X_i> gets its own error bar; see `anneal_ref.truth.errors`.

    Parameters
    ----------
    anneal : Anneal
    tolerance : float
        Largest absolute error allowed over all <Z_i> and <Z_i Z_j>, between 0 and 1.
    backend : Backend, optional
        Settings of the coarsest run; by default those of the cheapest back-end that is sure to do within the budget,
        and of a matrix product state otherwise.
    samples : int
        Measurements of the truth to keep.
    seed : int
        Of these samples.
    max_runs : int
        The most values of one knob to try, each about twice as fine as the one before; at least 3.
    budget : Budget or float, optional
        Seconds, or a `Budget(seconds, bytes)`; an hour by default. The first runs, without which there is no error, are
        made whatever they cost; `backend.plan(anneal)` tells beforehand.
    independent : bool
        Solve also with a back-end that shares no evolution code, and say whether the two agree within their joint
        error bars.
    strict : bool
        Raise `NotConverged`, with the reference inside, instead of returning one that missed the tolerance or that the
        second opinion contradicts.
    run : Run
        Threads, progress, and a checkpoint: every run of a matrix product state keeps its state in a file of its own
        beside it, goes on from there when the same reference is asked for again, and all are removed in the end. The
        exact back-ends are quick and keep none.

    Returns
    -------
    Reference
        Its `outcome` says whether the tolerance was met, `stopped` why no more runs were made. The measured error may
        well be far below the tolerance, and is not derived from it.

    Raises
    ------
    InputError, NotSupported, TooLarge
        Before any work.
    NotConverged
        Only if `strict`.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> instance = ar.draw_instance(ar.lattices.square(2, 3), ar.disorder.plus_minus(), seed=1)
    >>> truth = ar.reference(ar.Anneal(instance, schedule, duration=1.0), tolerance=1e-4)
    >>> truth.outcome, bool(truth.error < 1e-6)
    ('converged', True)
    >>> energy = truth.estimate(lambda moments: ar.observables.problem_energy(moments, instance))
    >>> bool(0 < energy.num < 1e-5)
    True
    """
    check_anneal(anneal)
    tolerance = number("tolerance", tolerance, 0.0, 1.0)
    if tolerance == 0.0:
        raise InputError("tolerance must be above 0; got 0")
    samples, seed = integer("samples", samples, low=1), integer("seed", seed, low=0)
    max_runs = integer("max_runs", max_runs, low=RUNS)
    budget = Budget.of(budget)
    backend = choose_backend(anneal, tolerance, budget) if backend is None else backend
    if isinstance(backend, type) or not isinstance(backend, Backend):
        raise InputError(f"backend must be a back-end such as StateVector(tolerance=1e-6); got {backend!r}")
    if "step" not in backend.knobs:
        raise InputError(f"backend must be one whose step can be refined; got {backend}, with knobs {backend.knobs}")
    plan_reference(anneal, backend)
    other = second_backend(anneal, tolerance, backend) if independent else None

    ground = ground_energy(anneal.instance)
    work = Refining(anneal, backend, tolerance, max_runs, budget, run)
    work.go()
    assert work.state is not None
    bits = frozen(work.state.sample(samples, seed).bits)
    folded = _folded(anneal, work.state)
    work.state = None
    second = None
    if other is not None:
        twin = Refining(anneal, other, tolerance, max_runs, budget, run)
        twin.go()
        errors = errors_of(anneal, twin.runs)
        outcome = "converged" if twin.stopped == MET else "not converged"
        first = measured_moments(anneal, work.runs, errors_of(anneal, work.runs))[0]
        second = Opinion.of(anneal, first, other, outcome, measured_moments(anneal, twin.runs, errors)[0])
    result = Reference(
        anneal, backend, tolerance, seed, max_runs, budget, tuple(work.runs), bits, folded, ground, work.stopped, second
    )
    if strict and result.outcome != "converged":
        raise NotConverged(_missed(result), result=result)
    return result


def identity_of(
    anneal: Anneal,
    backend: Backend,
    tolerance: float,
    samples: int,
    seed: int,
    max_runs: int,
    budget: Budget,
    independent: bool = False,
) -> str:
    """Return the identity of the reference with these settings, whether or not it exists yet."""
    settings = {
        "backend": repr(backend),
        "tolerance": float(tolerance),
        "samples": samples,
        "seed": seed,
        "max_runs": max_runs,
        "budget": repr(budget),
        "independent": independent,
    }
    return f"{anneal.identity[:32]}-{digest(settings)[:16]}"


def _missed(result: Reference) -> str:
    """Say what a reference fell short of, and what it would take."""
    if result.second is not None and result.second.disagrees:
        return f"the two back-ends contradict each other: {result.second}"
    text = f"the error after {len(result.runs)} runs is {result.error:.2g}, above the tolerance {result.tolerance:g}"
    if not result.settled:
        text += ", and the changes do not shrink yet"
    if result.stopped.startswith("out of"):
        return f"{text}; {result.stopped}"
    worst = max(result.parts, key=lambda name: result.parts[name])
    advice = {
        "step": "give a back-end with a smaller step",
        "truncation": "give a back-end with a larger bond dimension",
        "rounding": "give a back-end with less rounding",
    }[worst]
    return f"{text}; allow more runs (max_runs={result.max_runs + 2}), {advice}, or ask for less"


def _label(run: Evolution) -> str:
    if run.reordered:
        return "coarsest, reordered"
    words = {"step": "step / {}", "bond_dimension": "bond {}", "rounding": "less rounding"}
    named = [words[knob].format(2**count) for knob, count in run.refined.items() if knob != "bond_dimension"]
    if "bond_dimension" in run.ledger:
        named.insert(0, words["bond_dimension"].format(run.ledger["bond_dimension"]))
    return ", ".join(named) or "coarsest"


def _folded(anneal: Anneal, state: State) -> NDArray[np.float64] | None:
    if anneal.n_sites > LARGEST_TABLE or not hasattr(state, "probabilities"):
        return None
    table = np.asarray(state.probabilities(), dtype=np.float64)
    half = table[: len(table) // 2]
    symmetric = not anneal.instance.has_fields and np.array_equal(half, table[: len(table) // 2 - 1 : -1])
    return frozen(half.copy() if symmetric else table.copy())


def _change(before: Moments, after: Moments) -> float:
    return float(max(np.abs(after.z.value - before.z.value).max(), np.abs(after.zz.value - before.zz.value).max()))
