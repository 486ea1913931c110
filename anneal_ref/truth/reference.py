"""`reference`: what the Schrodinger equation says for one anneal, and how wrong that number can be."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.contract import Backend, State, check_anneal
from anneal_ref.backends.exact.state_vector import StateVector
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
from anneal_ref.truth.evolutions import RUNS, Evolution, decay_of, measured_moments, solve_reordered
from anneal_ref.truth.refinement import Decay

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
        The most runs that were allowed.
    runs : tuple of Evolution
        Coarse to fine, each with half the step of the one before.
    reordered : Evolution
        The coarsest run once more with the sites solved in another order; moments in the order of the instance.
    bits : ndarray of uint8, shape (n_samples, ceil(n_sites/8))
        The stored samples, packed.
    folded : ndarray of float64, shape (2^n,) or (2^(n-1),), optional
        Probabilities at the end, up to 16 sites. With the spin-flip symmetry, the half with the last spin up.
    ground : GroundEnergy
        The classical ground energy of the instance.
    provenance : mapping of str to str
        Versions, machine and time.
    decay : Decay
        How the changes shrink from run to run; see `anneal_ref.truth.refinement`.
    """

    anneal: Anneal
    backend: Backend
    tolerance: float
    seed: int
    max_runs: int
    runs: tuple[Evolution, ...]
    reordered: Evolution
    bits: NDArray[np.uint8]
    folded: NDArray[np.float64] | None
    ground: GroundEnergy
    provenance: Mapping[str, str] = field(default_factory=provenance)
    decay: Decay = field(init=False)
    _moments: Moments = field(init=False, repr=False)

    def __post_init__(self) -> None:
        """Measure the errors from the runs."""
        object.__setattr__(self, "decay", decay_of(self.anneal, self.runs, self.reordered))
        object.__setattr__(self, "_moments", measured_moments(self.anneal, self.runs, self.decay))

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return self.anneal.n_sites

    @property
    def error(self) -> float:
        """Largest measured error over all <Z_i> and <Z_i Z_j>."""
        return float(max(self._moments.z.num.max(), self._moments.zz.num.max()))

    @property
    def outcome(self) -> str:
        """Either "converged" or "not converged"."""
        return "converged" if self.decay.settled and self.error <= self.tolerance else "not converged"

    @property
    def identity(self) -> str:
        """Name of the reference: 32 hexadecimal digits of the anneal, a hyphen, 16 of what else changes digits."""
        return identity_of(self.anneal, self.backend, self.tolerance, len(self.bits), self.seed, self.max_runs)

    @property
    def finest(self) -> Backend:
        """The back-end as the last run used it."""
        return _refined(self.backend, len(self.runs) - 1)

    @property
    def ledger(self) -> Mapping[str, Any]:
        """Counters and checks of the finest run."""
        return self.runs[-1].ledger

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
        runs = (*self.runs[-RUNS:], self.runs[0], self.reordered)
        values = [evaluate(f, run.moments) for run in runs]
        if any(value.shape != values[0].shape or not np.isfinite(value).all() for value in values):
            raise InputError("f must give finite numbers of one shape for the moments of every run; got something else")
        *last, coarsest, reordered = values
        rounding = self.decay.growth * np.abs(reordered - coarsest) + np.finfo(np.float64).eps * np.abs(last[-1])
        return Estimate(last[-1], 0.0, self.decay.bars(last, rounding), "reference")

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
            "  run       steps    layers  largest change   norm drift",
        ]
        previous: Moments | None = None
        for k, run in enumerate((*self.runs, self.reordered)):
            again = k == len(self.runs)
            previous = self.runs[0].moments if again else previous
            change = "-" if previous is None else f"{_change(previous, run.moments):.2g}"
            steps, layers = (str(run.ledger.get(name, "-")) for name in ("steps", "layers"))
            drift = f"{run.ledger['norm_drift']:.1e}" if "norm_drift" in run.ledger else "-"
            lines.append(f"  {'reordered' if again else k:<9} {steps:>5} {layers:>9} {change:>15} {drift:>12}")
            previous = run.moments
        lines.append(
            f"  decay per run {self.decay.ratio:.2g}{'' if self.decay.settled else ' (not settled)'}, "
            f"rounding {self.decay.rounding:.1g}; ground energy {self.ground}; {len(self.bits)} samples kept"
        )
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
    strict: bool = False,
    run: Run = Run(),  # noqa: B008
) -> Reference:
    """Solve an anneal and measure how wrong the result can be.

    Three runs with the step halved from one to the next show how the error decays; more follow while the measured error
    is above the tolerance. Every <Z_i>, <Z_i Z_j> and <X_i> of the finest run gets its own error bar; see
    `anneal_ref.truth.refinement`. The cost is about seven times that of the coarsest run, plus once more to measure
    rounding.

    Parameters
    ----------
    anneal : Anneal
    tolerance : float
        Largest absolute error allowed over all <Z_i> and <Z_i Z_j>, between 0 and 1.
    backend : Backend, optional
        Settings of the coarsest run; by default a `StateVector` whose steps are meant for 1e-5, or for a hundred times
        the tolerance where that is less.
    samples : int
        Measurements of the truth to keep.
    seed : int
        Of these samples.
    max_runs : int
        The most runs to try, each twice as long as the one before; at least 3.
    strict : bool
        Raise `NotConverged`, with the reference inside, instead of returning one that missed the tolerance.
    run : Run
        Threads and progress.

    Returns
    -------
    Reference
        Its `outcome` says whether the tolerance was met. The measured error may well be far below the tolerance, and is
        not derived from it.

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
    backend = default_backend(tolerance) if backend is None else backend
    if isinstance(backend, type) or not isinstance(backend, Backend):
        raise InputError(f"backend must be a back-end such as StateVector(tolerance=1e-6); got {backend!r}")
    if "step" not in backend.knobs:
        raise InputError(f"backend must be one whose step can be refined; got {backend}, with knobs {backend.knobs}")
    _refined(backend, RUNS - 1).plan(anneal)

    ground = ground_energy(anneal.instance)
    reordered = solve_reordered(anneal, backend, run)
    runs: list[Evolution] = []
    while True:
        state = _refined(backend, len(runs)).evolve(anneal, run=run)
        runs.append(Evolution.of(state))
        if len(runs) >= RUNS:
            decay = decay_of(anneal, runs, reordered)
            moments = measured_moments(anneal, runs, decay)
            met = decay.settled and max(moments.z.num.max(), moments.zz.num.max()) <= tolerance
            if met or len(runs) == max_runs:
                break
        del state  # before the next one is allocated
    bits = frozen(state.sample(samples, seed).bits)
    result = Reference(
        anneal, backend, tolerance, seed, max_runs, tuple(runs), reordered, bits, _folded(anneal, state), ground
    )
    if strict and not met:
        raise NotConverged(
            f"the error after {len(runs)} runs is {result.error:.2g}, above the tolerance {tolerance:g}; "
            f"allow more runs (max_runs={max_runs + 2}), give a back-end with a smaller step, or ask for less",
            result=result,
        )
    return result


def default_backend(tolerance: float) -> StateVector:
    """Return the back-end of the coarsest run where none is given; its steps are small enough for a clear decay."""
    return StateVector(tolerance=min(1e-5, max(100.0 * tolerance, 1e-11)))


def identity_of(anneal: Anneal, backend: Backend, tolerance: float, samples: int, seed: int, max_runs: int) -> str:
    """Return the identity of the reference with these settings, whether or not it exists yet."""
    settings = {
        "backend": repr(backend),
        "tolerance": float(tolerance),
        "samples": samples,
        "seed": seed,
        "max_runs": max_runs,
    }
    return f"{anneal.identity[:32]}-{digest(settings)[:16]}"


def _refined(backend: Backend, times: int) -> Backend:
    for _ in range(times):
        backend = backend.finer("step")
    return backend


def _folded(anneal: Anneal, state: State) -> NDArray[np.float64] | None:
    if anneal.n_sites > LARGEST_TABLE or not hasattr(state, "probabilities"):
        return None
    table = np.asarray(state.probabilities(), dtype=np.float64)
    half = table[: len(table) // 2]
    symmetric = not anneal.instance.has_fields and np.array_equal(half, table[: len(table) // 2 - 1 : -1])
    return frozen(half.copy() if symmetric else table.copy())


def _change(before: Moments, after: Moments) -> float:
    return float(max(np.abs(after.z.value - before.z.value).max(), np.abs(after.zz.value - before.zz.value).max()))
