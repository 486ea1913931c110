"""`MPS`: the evolution of a matrix product state by the time-dependent variational principle."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from pathlib import Path
from time import perf_counter
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.blas_threads import blas_threads
from anneal_ref.backends.contract import Kick, Plan, check_anneal, check_kicks, check_times, refuse_checkpoint
from anneal_ref.backends.memory import require_memory
from anneal_ref.backends.mps.chain import Limits
from anneal_ref.backends.mps.checkpoint import Checkpoint, Saved, subject_of
from anneal_ref.backends.mps.costs import bond_limits, cost_of
from anneal_ref.backends.mps.course import REFRESH, Course
from anneal_ref.backends.mps.ground_start import ground_cost, ground_product
from anneal_ref.backends.mps.ordering import best_order, cut_ranks
from anneal_ref.backends.mps.start import plus_state
from anneal_ref.backends.mps.state import MPSState
from anneal_ref.backends.mps.steps import step_ends
from anneal_ref.backends.mps.wiring import Floats
from anneal_ref.backends.phase import phase_mesh
from anneal_ref.base.checks import choice, frozen, integer, number
from anneal_ref.base.errors import InputError
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal

_DTYPES: dict[str, Any] = {"double": np.complex128, "single": np.complex64}
# smallest error of a local exponential that makes sense
_KRYLOV = {"double": 1e-13, "single": 1e-7}
# interpreter, libraries and compiled kernels, beside the arrays
_OVERHEAD = 250 << 20


@dataclass(frozen=True, slots=True)
class MPS:
    """Matrix-product-state back-end: variational time evolution with a settable bond dimension, on any graph.

    Parameters
    ----------
    bond_dimension : int
        Cap on the dimension of every bond.
    truncation : float
        Weight that one update of a bond may discard below the cap, relative to the weight beyond the largest Schmidt
        value. Local exponentials are exact to a hundredth of its square root.
    step : float
        Length of a time step in the phase of the anneal (see `anneal_ref.backends.phase`), about one over the local
        energy; up to 4.
    precision : {"double", "single"}
        Of the tensors.
    site_order : sequence of int, optional
        The site at every position of the chain; by default the order with the smallest cuts that is found.
    halvings : int
        How often every step is cut in half; `finer("step")` adds one.

    Raises
    ------
    InputError
        A setting outside its range.

    References
    ----------
    J. Haegeman, C. Lubich, I. Oseledets, B. Vandereycken and F. Verstraete, Phys. Rev. B 94, 165116 (2016).

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> instance = ar.draw_instance(ar.lattices.square(3, 3), ar.disorder.plus_minus(), seed=1)
    >>> anneal = ar.Anneal(instance, schedule, duration=1.0)
    >>> state = ar.MPS(bond_dimension=16).evolve(anneal)
    >>> exact = ar.StateVector().evolve(anneal)
    >>> bool(abs(state.moments().zz.value - exact.moments().zz.value).max() < 1e-3)
    True
    """

    bond_dimension: int = 64
    truncation: float = 1e-12
    step: float = 1.0
    precision: Literal["double", "single"] = "double"
    site_order: tuple[int, ...] | None = None
    halvings: int = 0

    def __post_init__(self) -> None:
        """Check the settings."""
        put = object.__setattr__
        put(self, "bond_dimension", integer("bond_dimension", self.bond_dimension, low=1))
        put(self, "truncation", number("truncation", self.truncation, 0.0, 0.1))
        put(self, "step", number("step", self.step, 0.0, 4.0))
        if self.step == 0.0:
            raise InputError("step must be above 0 (and at most 4); got 0")
        choice("precision", self.precision, _DTYPES)
        put(self, "halvings", integer("halvings", self.halvings, 0, 20))
        if self.site_order is not None:
            places = tuple(integer(f"site_order[{p}]", site, low=0) for p, site in enumerate(self.site_order))
            if sorted(places) != list(range(len(places))):
                raise InputError(f"site_order must hold every site from 0 to {len(places) - 1} once; got {places}")
            put(self, "site_order", places)

    @property
    def knobs(self) -> tuple[str, ...]:
        """Names of the knobs that `finer` turns."""
        return ("step", "bond_dimension", "rounding")

    def finer(self, knob: str) -> MPS:
        """Return the back-end with one knob refined.

        Parameters
        ----------
        knob : {"step", "bond_dimension", "rounding"}
            Half of every step; twice the bond dimension; or double precision in place of single, and from there a
            hundredth of the weight that an update may discard and a tenth of the error of local exponentials.
        """
        choice("knob", knob, self.knobs)
        if knob == "step":
            return replace(self, halvings=self.halvings + 1)
        if knob == "bond_dimension":
            return replace(self, bond_dimension=2 * self.bond_dimension)
        if self.precision == "single":
            return replace(self, precision="double")
        return replace(self, truncation=self.truncation / 100)

    def plan(self, anneal: Anneal) -> Plan:
        """Return memory, time and steps of a run, told from the size, the ranks of the cuts and the bond dimension.

        Raises
        ------
        InputError
            A site order of another length.
        TooLarge
            More memory than there is.
        """
        check_anneal(anneal)
        order = self._order(anneal)
        grid = self._grid(anneal, ())
        needed, seconds = self._require(anneal, order, len(grid) - 1)
        ranks = cut_ranks(anneal.instance.coupling_matrix(), order) if len(order) > 1 else np.zeros(1, int)
        return Plan(
            backend=type(self).__name__,
            bytes=needed + _OVERHEAD,
            seconds=seconds,
            steps=len(grid) - 1,
            layers=2 * (len(grid) - 1),
            details={
                "bond dimension": self.bond_dimension,
                "largest that could matter": max(bond_limits(anneal.n_sites, not anneal.instance.has_fields, 1 << 60)),
                "cut ranks": f"largest {int(ranks.max())}, mean {float(ranks.mean()):.1f}",
                "symmetric": not anneal.instance.has_fields,
                "precision": self.precision,
            },
        )

    def evolve(self, anneal: Anneal, at: float = 1.0, kicks: Sequence[Kick] = (), run: Run = Run()) -> MPSState:  # noqa: B008
        """Return the state at one time.

        Parameters
        ----------
        anneal : Anneal
        at : float
            Fraction of the duration, from 0 to 1.
        kicks : sequence of (float, int)
            Z on a site at a fraction of the duration, in ascending time up to `at`.
        run : Run
            Threads, progress and checkpoint. The file is written at the start, after a step when `run.every` seconds
            have passed, and at the end; with the same anneal, settings, `at` and kicks the evolution goes on from it,
            on the same machine to the same bits.

        Raises
        ------
        InputError, TooLarge
            Something other than an anneal, times outside their range, kicks out of order, a checkpoint of another
            computation; see `plan`.
        ArchiveError
            A checkpoint that is damaged, or cannot be written.
        NotConverged
            From `start="ground"`, when the ground state of H(0) is not found; see `ground_product`.
        """
        check_anneal(anneal)
        end = number("at", at, 0.0, 1.0)
        return next(self._march(anneal, (end,), check_kicks(kicks, anneal.n_sites, end), run))

    def states(self, anneal: Anneal, at: Sequence[float], run: Run = Run()) -> Iterator[MPSState]:  # noqa: B008
        """Give the states at ascending fractions of the duration, in one pass of time; no checkpoint is written."""
        check_anneal(anneal)
        refuse_checkpoint(run, "MPS.states")
        return self._march(anneal, check_times(at), (), run)

    def _march(self, anneal: Anneal, stops: tuple[float, ...], kicks: tuple[Kick, ...], run: Run) -> Iterator[MPSState]:
        began = perf_counter()
        duration = anneal.duration
        order = self._order(anneal)
        grid = self._grid(anneal, sorted({u * duration for u in (*stops, *(u for u, _ in kicks))}))
        self._require(anneal, order, len(grid) - 1)
        grid = grid[: _nearest(grid, stops[-1] * duration) + 1]
        last = len(grid) - 1
        kick_steps = [(_nearest(grid, u * duration), site) for u, site in kicks]
        stop_steps = [(_nearest(grid, u * duration), u) for u in stops]
        settings = {name: getattr(self, name) for name in ("precision", "bond_dimension", "truncation")}

        checkpoint, saved = None, None
        if run.checkpoint is not None:
            checkpoint = Checkpoint(Path(run.checkpoint), run.every, subject_of(anneal, self, stops[-1], kicks))
            saved = checkpoint.read()
        begun = self._start(anneal, order, run.threads) if saved is None else saved
        course = Course(anneal, grid, self._limits, begun, run.threads, began)
        if checkpoint is not None and saved is None:
            checkpoint.write(course.saved())
        with run.track(last, f"{anneal.n_sites} spins") as bar:
            bar.update(course.steps, course.note())
            while True:
                for site in (site for step, site in kick_steps if step == course.steps):
                    course.kick(site)
                for at in (u for step, u in stop_steps if step == course.steps):
                    ledger = {"backend": type(self).__name__} | settings | course.ledger()
                    yield MPSState(anneal, at, course.chain.product(), ledger)
                if course.steps == last:
                    return
                course.step()
                bar.update(1, course.note())
                if checkpoint is not None and (checkpoint.is_due or course.steps == last):
                    checkpoint.write(course.saved())

    @property
    def _limits(self) -> Limits:
        krylov = max(1e-2 * self.truncation**0.5, _KRYLOV[self.precision])
        return Limits(self.bond_dimension, self.truncation, krylov)

    def _start(self, anneal: Anneal, order: NDArray[np.intp], threads: int) -> Saved:
        if anneal.start == "plus":
            return Saved(plus_state(anneal.instance, order, not anneal.instance.has_fields, _DTYPES[self.precision]))
        with blas_threads(threads):
            ground = ground_product(anneal, order, self._limits)
        tensors = [tensor.astype(_DTYPES[self.precision]) for tensor in ground.product.tensors]
        return Saved(replace(ground.product, tensors=tensors), start=ground.ledger())

    def _order(self, anneal: Anneal) -> NDArray[np.intp]:
        n = anneal.n_sites
        if self.site_order is None:
            coordinates = anneal.instance.lattice.coordinates
            places = None if coordinates is None else (coordinates.shape[1], coordinates.tobytes())
            return _found_order(n, np.packbits(anneal.instance.coupling_matrix() != 0).tobytes(), places)
        if len(self.site_order) != n:
            raise InputError(f"site_order must hold the {n} sites of the anneal; got {len(self.site_order)}")
        return np.array(self.site_order, dtype=np.intp)

    def _grid(self, anneal: Anneal, marks: Sequence[float]) -> Floats:
        mesh = phase_mesh(anneal)
        steps = mesh.total / self.step * 2.0**self.halvings
        require_memory(
            int(64 * steps), f"an anneal of duration {anneal.duration:g} in about {steps:.1g} time steps",
            ("a shorter duration", "a longer step"),
        )  # fmt: skip
        return step_ends(anneal, mesh, self.step, marks, self.halvings)

    def _require(self, anneal: Anneal, order: NDArray[np.intp], steps: int) -> tuple[int, float]:
        """Return bytes and seconds of a run, or raise `TooLarge`."""
        cost = cost_of(anneal.instance, order, self.bond_dimension, self.precision, 1 / REFRESH)
        needed, seconds = cost.bytes, cost.seconds * steps
        if anneal.start == "ground":
            search = ground_cost(anneal.instance, order, self.bond_dimension)
            needed, seconds = max(needed, search.bytes), seconds + search.seconds
        smaller = max(1, self.bond_dimension // 2)
        require_memory(
            needed, f"a matrix product state of {len(order)} spins with bond dimension {self.bond_dimension}",
            (f"MPS(bond_dimension={smaller})", "precision='single'", "a machine with more memory"),
        )  # fmt: skip
        return needed, seconds


@lru_cache(maxsize=256)
def _found_order(n: int, pattern: bytes, places: tuple[int, bytes] | None) -> NDArray[np.intp]:
    # a search of up to a second, for all anneals of a lattice
    couplings = np.unpackbits(np.frombuffer(pattern, np.uint8), count=n * n).reshape(n, n)
    return frozen(best_order(couplings, None if places is None else np.frombuffer(places[1]).reshape(n, places[0])))


def _nearest(grid: Floats, time: float) -> int:
    # times that differ by rounding alone share a step end
    return int(np.abs(grid - time).argmin())
