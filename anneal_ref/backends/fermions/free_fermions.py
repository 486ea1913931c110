"""`FreeFermions`: chains and rings without fields, exactly, up to many thousands of spins."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from time import perf_counter
from typing import Any, Literal

import numpy as np

from anneal_ref.backends.blas_threads import blas_threads
from anneal_ref.backends.contract import Kick, Plan, check_anneal, check_kicks, check_times, refuse_checkpoint
from anneal_ref.backends.exact.splitting import SPLITTINGS, Floats, Splitting, merge_steps, order_on, step_angles
from anneal_ref.backends.exact.steps import choose_splitting, step_density, time_grid
from anneal_ref.backends.fermions.chains import Chain, chain_of
from anneal_ref.backends.fermions.cones import COLUMNS, Cones
from anneal_ref.backends.fermions.covariance import grown, grown_bytes
from anneal_ref.backends.fermions.ground_modes import ground_modes
from anneal_ref.backends.fermions.state import FermionState
from anneal_ref.backends.memory import require_memory
from anneal_ref.backends.phase import halved, phase_mesh
from anneal_ref.base.checks import choice, integer, number
from anneal_ref.base.errors import InputError
from anneal_ref.base.run import Run
from anneal_ref.model.anneal import Anneal
from anneal_ref.model.instances import Instance
from anneal_ref.model.lattices import chain as open_chain

_FLOOR = 1e-11
# time of a layer per element of M, and per site for its table; measured on one core of about 3 GHz with 512-bit vectors
_ELEMENT_SECONDS = 1e-10
_SITE_SECONDS = 4e-9
_LAYER_SECONDS = 5e-7
# singular values and two products of dense matrices, per N^3
_GROUND_SECONDS = 5e-10
# times, clocks, angles and merged angles
_LAYER_BYTES = 64
# interpreter, libraries and compiled kernels, beside the arrays
_OVERHEAD = 200 << 20
_MESH = 1024


@dataclass(frozen=True, slots=True)
class FreeFermions:
    """Exact back-end for open chains and one ring without fields: free fermions in their light cones.

    All couplings and transverse weights may differ from site to site. Several open chains, and single spins, are taken
    together; the order of the sites does not matter. The work grows as the number of spins times the square of the
    duration.

    Parameters
    ----------
    tolerance : float
        Largest absolute error over all <Z_i Z_j> that the steps are chosen for, from 1e-11 to 0.1. It is what the
        a-priori rule aims at, not a measured error; `reference` measures.
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
    E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961); P. Pfeuty, Ann. Phys. 57, 79 (1970). The splittings:
    S. Blanes and P. C. Moan, J. Comput. Appl. Math. 142, 313 (2002), Table 2.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(1.0, 0.0), problem=(0.0, 1.0))
    >>> instance = ar.Instance(ar.lattices.chain(1000, periodic=True), [-1.0] * 1000)
    >>> state = ar.FreeFermions().evolve(ar.Anneal(instance, schedule, duration=8.0))
    >>> state.kink_density()
    0.11232103
    """

    tolerance: float = 1e-8
    steps: int | None = None
    scheme: Literal["blanes-moan-6", "blanes-moan-4", "strang"] | None = None
    halvings: int = 0

    def __post_init__(self) -> None:
        """Check the settings."""
        put = object.__setattr__
        put(self, "tolerance", number("tolerance", self.tolerance, 0.0, 0.1))
        if self.tolerance < _FLOOR:
            raise InputError(
                f"tolerance must be at least {_FLOOR:g}, where rounding reaches it; got {self.tolerance:g}"
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

    def finer(self, knob: str) -> FreeFermions:
        """Return the back-end with every step cut in half exactly."""
        choice("knob", knob, self.knobs)
        return replace(self, halvings=self.halvings + 1)

    def plan(self, anneal: Anneal) -> Plan:
        """Return memory, time, steps and layers of a run, without any of its work.

        Raises
        ------
        NotSupported
            Fields, or a lattice that is neither open chains nor one ring.
        TooLarge
            More memory than there is.
        """
        chain = chain_of(check_anneal(anneal).instance)
        splitting, grid = self._steps(anneal, chain, ())
        needed, width = self._require(anneal, chain, splitting, grid)
        layers = (len(grid) - 1) * splitting.stages + 1
        n = chain.n_sites
        a_layer = _LAYER_SECONDS + n * (_SITE_SECONDS + 2 * width * _ELEMENT_SECONDS)
        return Plan(
            backend=type(self).__name__,
            bytes=needed + _OVERHEAD,
            seconds=layers * a_layer + (0.0 if _starts_as_plus(anneal, chain) else _GROUND_SECONDS * n**3),
            steps=len(grid) - 1,
            layers=layers,
            details={
                "scheme": splitting.name,
                "lattice": "a ring" if chain.ring else "open chains",
                "light cone": f"{width} of {2 * n} fermion operators",
            },
        )

    def evolve(self, anneal: Anneal, at: float = 1.0, kicks: Sequence[Kick] = (), run: Run = Run()) -> FermionState:  # noqa: B008
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
        """
        check_anneal(anneal)
        refuse_checkpoint(run, "FreeFermions")
        end = number("at", at, 0.0, 1.0)
        return next(self._march(anneal, (end,), check_kicks(kicks, anneal.n_sites, end), run))

    def states(self, anneal: Anneal, at: Sequence[float], run: Run = Run()) -> Iterator[FermionState]:  # noqa: B008
        """Give the states at ascending fractions of the duration, in one pass of time; all of them stay."""
        check_anneal(anneal)
        refuse_checkpoint(run, "FreeFermions")
        return self._march(anneal, check_times(at), (), run)

    def _march(
        self, anneal: Anneal, stops: tuple[float, ...], kicks: tuple[Kick, ...], run: Run
    ) -> Iterator[FermionState]:
        began = perf_counter()
        duration = anneal.duration
        times = sorted({u * duration for u in stops} | {u * duration for u, _ in kicks})
        chain = chain_of(anneal.instance)
        splitting, grid = self._steps(anneal, chain, times)
        needed, width = self._require(anneal, chain, splitting, grid)
        grid = grid[: _nearest(grid, stops[-1] * duration) + 1]
        problem, transverse = step_angles(anneal, grid, splitting)
        with blas_threads(run.threads):
            ground = None if _starts_as_plus(anneal, chain) else ground_modes(anneal, chain)
        cones = Cones(chain.n_sites, chain.ring, width, run.threads)
        ledger: dict[str, Any] = {"backend": type(self).__name__, "ring": chain.ring, "bytes": needed}
        if ground is not None:
            ledger |= {"ground_energy": ground.energy, "ground_gap": ground.gap}
        ledger |= {"scheme": splitting.name, "order": order_on(anneal, grid, splitting)}
        ledger |= {"steps": 0, "layers": 0, "kicks": 0}
        signs = np.ones(chain.n_sites)
        done = 0
        with run.track(transverse.size + len(times), f"{anneal.n_sites} spins") as bar:
            for time in times:
                step = _nearest(grid, time)
                if step > done:
                    first, second, closing = merge_steps(problem[done:step], transverse[done:step])
                    angles = np.append(first, closing), np.append(second, 0.0)
                    cones.layers(*angles, chain.couplings, signs * chain.weights, progress=bar.update)
                    ledger["layers"] += len(angles[0])
                    ledger["steps"] = done = step
                for site in [site for u, site in kicks if u * duration == time]:
                    signs[chain.places[site]] *= -1
                    ledger["kicks"] += 1
                for at in (u for u in stops if u * duration == time):
                    ledger |= {"cone": cones.widest, "edge": cones.edge}
                    ledger["norm_drift"] = float(np.abs(cones.norms() - 1.0).max())
                    with blas_threads(run.threads):
                        covariance = grown(cones, None if ground is None else ground.pairs)
                    yield FermionState(
                        anneal, at, chain, covariance, signs.copy(), ledger | {"seconds": perf_counter() - began}
                    )

    def _steps(self, anneal: Anneal, chain: Chain, marks: Sequence[float]) -> tuple[Splitting, Floats]:
        mesh = phase_mesh(replace(anneal, instance=_two_spins(chain), start="ground"))
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

    def _require(self, anneal: Anneal, chain: Chain, splitting: Splitting, grid: Floats) -> tuple[int, int]:
        """Return the bytes of a run and the rows of a light cone, or raise `TooLarge`."""
        n, width = chain.n_sites, cone_width(anneal, chain)
        local = _starts_as_plus(anneal, chain)
        needed = grown_bytes(n, width, local) + _LAYER_BYTES * len(grid) * splitting.stages
        alternatives = ("a shorter duration", "fewer spins", *(() if local else ("start='plus'",)))
        require_memory(needed, f"free fermions on {n} spins with light cones of {width} operators", alternatives)
        return needed, width


def cone_width(anneal: Anneal, chain: Chain) -> int:
    """Return how many operators a light cone will have at the end, as far as the strongest terms tell.

    The front moves over at most 4 min(G w, |P J|) operators per unit of time; ahead of it is a tail.
    """
    times = np.linspace(0.0, anneal.duration, _MESH + 1)
    transverse = anneal.transverse(times) * chain.weights.max()
    problem = np.abs(anneal.problem(times)) * np.abs(chain.couplings).max()
    front = 4 * float(np.minimum(transverse, problem).mean()) * anneal.duration
    # the tail down to the edge of a window, measured for fronts from 0 to 300 operators
    wide = 2 * (front + 15 * front ** (1 / 3) + 8) + COLUMNS
    return int(min(wide, 2 * chain.n_sites))


def _two_spins(chain: Chain) -> Instance:
    """Return two spins with the largest local frequencies of the chain, which are all that the step rule asks for."""
    local = np.sqrt(chain.couplings**2 + np.roll(chain.couplings, 1) ** 2).max()
    return Instance(open_chain(2), [local], transverse=[chain.weights.max()] * 2)


def _starts_as_plus(anneal: Anneal, chain: Chain) -> bool:
    """Whether the start is |+...+>, as it also is where the ground state of H(0) is asked for and P(0) = 0."""
    free = anneal.problem(0.0) == 0.0 or not chain.couplings.any()
    return anneal.start == "plus" or bool(free and anneal.transverse(0.0) > 0 and chain.weights.all())


def _nearest(grid: Floats, time: float) -> int:
    # times that differ by rounding alone share a step end
    return int(np.abs(grid - time).argmin())
