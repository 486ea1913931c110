"""`StateVector`: the exact evolution of all amplitudes, in place, by splitting."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from time import perf_counter
from typing import Any, Literal

import numpy as np

from anneal_ref.backends.contract import Kick, Plan, check_anneal, check_kicks, check_times, refuse_checkpoint
from anneal_ref.backends.exact.ground_start import ground_start, ground_start_bytes
from anneal_ref.backends.exact.register import Register
from anneal_ref.backends.exact.splitting import SPLITTINGS, Floats, Splitting, merge_steps, order_on, step_angles
from anneal_ref.backends.exact.state import ExactState
from anneal_ref.backends.exact.steps import choose_splitting, step_density, time_grid
from anneal_ref.backends.memory import require_memory
from anneal_ref.backends.phase import halved, phase_mesh
from anneal_ref.base.checks import choice, integer, number
from anneal_ref.base.errors import InputError, NotSupported
from anneal_ref.base.run import Bar, Run
from anneal_ref.model.anneal import Anneal

_FLOORS = {"double": 1e-11, "single": 5e-6}
# rounding error of a correlation after L layers is below this times sqrt(L): measured, twice the largest of 14 runs of
# 240 to 28 000 layers in single precision, and scaled by the unit roundoff to double
_ROUNDING = {"double": 3e-16, "single": 1.5e-7}
# time of a layer: per stored amplitude, and for its tables; measured at N = 10 to 22 on one core of about 3 GHz with
# 256-bit vectors
_LAYER_SECONDS = {"double": 2.0e-9, "single": 1.1e-9}
_TABLE_SECONDS = 3e-6
# times, clocks, angles and merged angles
_LAYER_BYTES = 64
# interpreter, libraries and compiled kernels, beside the arrays
_OVERHEAD = 200 << 20


@dataclass(frozen=True, slots=True)
class StateVector:
    """Exact state-vector back-end: Blanes-Moan splittings with a step rule that meets a tolerance.

    Parameters
    ----------
    tolerance : float
        Largest absolute error over all <Z_i> and <Z_i Z_j> that the steps are chosen for, from 1e-11 (5e-6 in single
        precision, more for long anneals) to 0.1. It is what the a-priori rule aims at, not a measured error;
        `reference` measures.
    precision : {"double", "single"}
        Of the stored amplitudes.
    steps : int, optional
        Number of steps over the whole duration (at least; each smooth piece has one), in place of the step rule.
    scheme : {"blanes-moan-6", "blanes-moan-4", "strang"}, optional
        The splitting; by default the cheaper of the first two.
    halvings : int
        How often every step is cut in half; `finer("step")` adds one.

    Raises
    ------
    InputError
        A setting outside its range.

    References
    ----------
    S. Blanes and P. C. Moan, J. Comput. Appl. Math. 142, 313 (2002), Table 2.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> instance = ar.draw_instance(ar.lattices.square(3, 3), ar.disorder.plus_minus(), seed=1)
    >>> anneal = ar.Anneal(instance, schedule, duration=1.0)
    >>> backend = ar.StateVector(tolerance=1e-6)
    >>> state = backend.evolve(anneal)
    >>> fine = ar.StateVector(tolerance=1e-6).finer("step").evolve(anneal)
    >>> bool(abs(state.moments().zz.value - fine.moments().zz.value).max() < 1e-6)
    True
    """

    tolerance: float = 1e-8
    precision: Literal["double", "single"] = "double"
    steps: int | None = None
    scheme: Literal["blanes-moan-6", "blanes-moan-4", "strang"] | None = None
    halvings: int = 0

    def __post_init__(self) -> None:
        """Check the settings."""
        put = object.__setattr__
        choice("precision", self.precision, _FLOORS)
        put(self, "tolerance", number("tolerance", self.tolerance, 0.0, 0.1))
        if self.tolerance < _FLOORS[self.precision]:
            raise InputError(
                f"tolerance must be at least {_FLOORS[self.precision]:g} in {self.precision} precision, "
                f"where rounding reaches it; got {self.tolerance:g}"
                + ("; use precision='double'" if self.precision == "single" else "")
            )
        if self.steps is not None:
            put(self, "steps", integer("steps", self.steps, low=1))
        if self.scheme is not None:
            choice("scheme", self.scheme, SPLITTINGS)
        put(self, "halvings", integer("halvings", self.halvings, 0, 20))

    @property
    def knobs(self) -> tuple[str, ...]:
        """Names of the knobs that `finer` turns."""
        return ("step",)

    def finer(self, knob: str) -> StateVector:
        """Return the back-end with every step cut in half exactly."""
        choice("knob", knob, self.knobs)
        return replace(self, halvings=self.halvings + 1)

    def plan(self, anneal: Anneal) -> Plan:
        """Return memory, time, steps and layers of a run, without allocating the state.

        Raises
        ------
        NotSupported
            So many layers that rounding in this precision reaches the tolerance.
        TooLarge
            More memory than there is.
        """
        check_anneal(anneal)
        splitting, grid = self._steps(anneal, ())
        needed = self._require(anneal, splitting, grid)
        layers = (len(grid) - 1) * splitting.stages + 1
        symmetric = not anneal.instance.has_fields
        stored = 1 << (anneal.n_sites - symmetric)
        return Plan(
            backend=type(self).__name__,
            bytes=needed + _OVERHEAD,
            seconds=layers * (_TABLE_SECONDS + stored * _LAYER_SECONDS[self.precision]),
            steps=len(grid) - 1,
            layers=layers,
            details={"scheme": splitting.name, "symmetric half": symmetric, "precision": self.precision},
        )

    def evolve(self, anneal: Anneal, at: float = 1.0, kicks: Sequence[Kick] = (), run: Run = Run()) -> ExactState:  # noqa: B008
        """Return the state at one time.

        Parameters
        ----------
        anneal : Anneal
        at : float
            Fraction of the duration, from 0 to 1.
        kicks : sequence of (float, int)
            Z on a site at a fraction of the duration, in ascending time up to `at`.
        run : Run
            Threads and progress; no checkpoint.

        Raises
        ------
        InputError, NotSupported, TooLarge
            Something other than an anneal, times outside their range, kicks out of order; see `plan`.
        """
        check_anneal(anneal)
        refuse_checkpoint(run, "StateVector")
        end = number("at", at, 0.0, 1.0)
        return next(self._march(anneal, (end,), check_kicks(kicks, anneal.n_sites, end), run))

    def states(self, anneal: Anneal, at: Sequence[float], run: Run = Run()) -> Iterator[ExactState]:  # noqa: B008
        """Give the states at ascending fractions of the duration, in one pass of time.

        There is one set of amplitudes: a state answers until the next one is taken, and afterwards only with the
        moments that it has been asked for before.
        """
        check_anneal(anneal)
        refuse_checkpoint(run, "StateVector")
        return self._march(anneal, check_times(at), (), run)

    def _march(
        self, anneal: Anneal, stops: tuple[float, ...], kicks: tuple[Kick, ...], run: Run
    ) -> Iterator[ExactState]:
        began = perf_counter()
        duration = anneal.duration
        times = sorted({u * duration for u in stops} | {u * duration for u, _ in kicks})
        splitting, grid = self._steps(anneal, times)
        self._require(anneal, splitting, grid)
        grid = grid[: _nearest(grid, stops[-1] * duration) + 1]
        problem, transverse = step_angles(anneal, grid, splitting)
        register, ledger = self._start(anneal, run)
        ledger |= {"scheme": splitting.name, "order": order_on(anneal, grid, splitting)}
        ledger |= {"steps": 0, "layers": 0, "kicks": 0}
        done, pending = 0, 0.0
        with run.track(transverse.size, f"{anneal.n_sites} spins") as bar:
            for time in times:
                step = _nearest(grid, time)
                pending = _advance(register, problem[done:step], transverse[done:step], pending, bar)
                ledger["layers"] += (step - done) * splitting.stages
                ledger["steps"] = done = step
                for site in [site for u, site in kicks if u * duration == time]:
                    # Z commutes with the problem part that is still pending
                    register.kick(site)
                    ledger["kicks"] += 1
                for at in (u for u in stops if u * duration == time):
                    if pending:
                        register.layers(np.array([pending]), np.zeros(1))
                        ledger["layers"] += 1
                        pending = 0.0
                    ledger["norm_drift"] = register.norm() - 1.0
                    state = ExactState(anneal, at, register, ledger | {"seconds": perf_counter() - began})
                    yield state
                    if at != stops[-1]:
                        state.release()

    def _start(self, anneal: Anneal, run: Run) -> tuple[Register, dict[str, Any]]:
        instance = anneal.instance
        symmetric = not instance.has_fields
        ledger: dict[str, Any] = {
            "backend": type(self).__name__,
            "precision": self.precision,
            "symmetric": symmetric,
            "bytes": Register.bytes_needed(instance.n_sites, symmetric, self.precision),
        }
        register = Register(
            instance.coupling_matrix(), instance.fields, instance.transverse, symmetric, self.precision, run.threads
        )
        if anneal.start == "ground":
            ground = ground_start(anneal)
            register.load(ground.amplitudes)
            ledger |= {"ground_energy": ground.energy, "ground_residual": ground.residual}
        return register, ledger

    def _steps(self, anneal: Anneal, marks: Sequence[float]) -> tuple[Splitting, Floats]:
        mesh = phase_mesh(anneal)
        splitting = SPLITTINGS[self.scheme] if self.scheme else choose_splitting(self.tolerance)
        density = step_density(splitting, self.tolerance)
        if self.steps is not None:
            density = self.steps / max(mesh.total, 1e-12)
        steps = mesh.total * density * 2.0**self.halvings
        require_memory(
            int(_LAYER_BYTES * steps * splitting.stages),
            f"an anneal of duration {anneal.duration:g} in about {steps:.1g} time steps",
            ("a shorter duration", "a looser tolerance"),
        )
        return splitting, halved(time_grid(anneal, mesh, density, marks), self.halvings)

    def _require(self, anneal: Anneal, splitting: Splitting, grid: Floats) -> int:
        """Return the bytes of a run, or raise `NotSupported` or `TooLarge`."""
        layers = len(grid) * splitting.stages
        rounding = _ROUNDING[self.precision] * layers**0.5
        if rounding > self.tolerance:
            raise NotSupported(
                f"in {self.precision} precision {layers} layers may round to {rounding:.1e}, "
                f"above the tolerance of {self.tolerance:g}",
                ("StateVector(precision='double')", "a looser tolerance", "a shorter anneal"),
            )
        n, symmetric = anneal.n_sites, not anneal.instance.has_fields
        needed = Register.bytes_needed(n, symmetric, self.precision) + _LAYER_BYTES * layers
        if anneal.start == "ground":
            needed += ground_start_bytes(n, symmetric)

        def alternatives(free: int) -> tuple[str, ...]:
            fits = self.precision == "double" and Register.bytes_needed(n, symmetric, "single") <= free
            single = ("StateVector(precision='single', tolerance=1e-4)",) if fits else ()
            return (*single, "MPS(bond_dimension=64)", "FreeFermions() for chains without fields", "fewer spins")

        require_memory(needed, f"the state vector of {n} spins", alternatives)
        return needed


def _nearest(grid: Floats, time: float) -> int:
    # times that differ by rounding alone share a step end
    return int(np.abs(grid - time).argmin())


def _advance(register: Register, problem: Floats, transverse: Floats, pending: float, bar: Bar) -> float:
    """Apply the steps and return the problem angle that is still to come; `pending` is the one from before."""
    if not len(problem):
        return pending
    problem_angles, transverse_angles, closing = merge_steps(problem, transverse)
    problem_angles[0] += pending
    register.layers(problem_angles, transverse_angles, progress=bar.update)
    return closing
