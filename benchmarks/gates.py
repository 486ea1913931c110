"""Time to the same correlation error: the variational principle against gates on a matrix product state.

    python benchmarks/gates.py --quick     4x4 at T = 1, error 1e-2, one seed (a minute or two)
    python benchmarks/gates.py --full      4x4 and 4x5, T = 1 and 5, errors 1e-2 and 1e-3, two seeds (about an hour)
    python benchmarks/gates.py --quick --peers     the gates alone

Problem: cylinders of circumference 4 with +-1 couplings, G = 5 (1 - s)^2, P = 5 s rad/ns, from |+...+>. The error is
the correlation error against the state vector, sqrt(sum (c - t)^2 / sum t^2) over all pairs. Every contender is tuned
in every case: the least time over a grid of bond dimensions and of steps (a quarter of an octave apart) that stays
within the error. CPU time of one thread; reading the correlations is excluded for the gates and included for us.

The gates, by quimb, are the second-order splitting with the coefficients of the middle of the step, the half layers of
X rotations merged, so that a step costs one layer of ZZ gates. That layer is applied

- gate by gate: `CircuitMPS`, distant pairs swapped together and back;
- at once: a diagonal matrix product operator for half of the layer, compressed by successive randomised compression
  (Camano, Epperly and Tropp 2025, as quimb has it), two spins a tensor;
- column by column: the four spins of a ring are one tensor, so that no gate is long-range. The fastest here, but the
  tensor that it splits holds 256 D^2 numbers: on 4x4 that is the whole state vector, on wider cylinders out of reach.
"""

from __future__ import annotations

import os

for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS"):
    os.environ[_variable] = "1"

import argparse  # noqa: E402
import time  # noqa: E402
import warnings  # noqa: E402
from collections.abc import Callable, Iterator, Sequence  # noqa: E402
from dataclasses import dataclass  # noqa: E402
from functools import cache, partial, reduce  # noqa: E402
from itertools import product  # noqa: E402

import numpy as np  # noqa: E402
import quimb.tensor as qtn  # noqa: E402

import anneal_ref as ar  # noqa: E402

RING = 4
TARGETS = (1e-2, 1e-3)
# the search for a contender ends where a run takes so many times the seconds of the fastest of the gates before it
BEHIND = 4.0
BONDS = (12, 16, 20, 24, 32, 40, 48, 64, 80, 96, 128, 192, 256)
# steps of ours in units of the phase, layers of gates per ns from the first that resolves the fields
STEPS = 4 * 2 ** (-np.arange(24) / 4)
LAYERS = 8 * 2 ** (np.arange(24) / 4)
X, Z = np.array([[0, 1], [1, 0]]), np.array([1, -1])


@dataclass(frozen=True, eq=False)
class Case:
    """An anneal and the exact correlations at its end."""

    anneal: ar.Anneal
    exact: np.ndarray

    @property
    def edges(self) -> list[tuple[int, int, float]]:
        """Pairs i < j with their couplings, the couplings of a column before those to the next."""
        instance = self.anneal.instance
        pairs = (sorted(map(int, edge)) for edge in instance.lattice.edges)
        return sorted((i, j, float(c)) for (i, j), c in zip(pairs, instance.couplings, strict=True))

    def error(self, zz: np.ndarray) -> float:
        """Return the correlation error of these <Z_i Z_j>."""
        pairs = np.triu_indices(len(zz), 1)
        return float(np.sqrt(((zz - self.exact)[pairs] ** 2).sum() / (self.exact[pairs] ** 2).sum()))

    def angles(self, layers: int) -> Iterator[tuple[float, float]]:
        """Give the angles of D(phi) = exp(-i phi sum J ZZ) and X(theta) = exp(i theta sum X), layer by layer.

        The half layer of X before the first D is a phase on |+...+>.
        """
        s, dt = (np.arange(layers) + 0.5) / layers, self.anneal.duration / layers
        transverse = 5 * (1 - s) ** 2 * dt
        yield from zip(5 * s * dt, (transverse + np.append(transverse[1:], 0.0)) / 2, strict=True)


def cylinder(length: int, duration: float, seed: int) -> Case:
    lattice = ar.lattices.square(length, RING, periodic=(False, True))
    instance = ar.draw_instance(lattice, ar.disorder.plus_minus(), seed=seed)
    anneal = ar.Anneal(instance, ar.Schedule.polynomial([5, -10, 5], [0, 5]), duration)
    return Case(anneal, ar.StateVector(tolerance=1e-9).evolve(anneal).moments().zz.value)


def plus(sites: int, spins: int) -> qtn.MatrixProductState:
    """Return |+...+> with so many spins in every tensor."""
    amplitude = np.full((1, 1, 1 << spins), 2 ** (-spins / 2), np.complex64)
    return qtn.MatrixProductState([amplitude[0], *[amplitude] * (sites - 2), amplitude[0]], shape="lrp")


def rotation(theta: float, spins: int) -> np.ndarray:
    """Return exp(i theta X) on each of the spins of a tensor."""
    one = np.cos(theta) * np.eye(2) + 1j * np.sin(theta) * X
    return reduce(np.kron, [one] * spins).astype(np.complex64)


def gate_by_gate(case: Case, bond: int, layers: int, cutoff: float) -> qtn.MatrixProductState:
    n, edges = case.anneal.instance.n_sites, case.edges
    circuit = qtn.CircuitMPS(psi0=plus(n, 1), dtype="complex64", max_bond=bond, cutoff=cutoff)
    zz = np.kron(Z, Z)
    for phi, theta in case.angles(layers):
        for i, j, coupling in edges:
            circuit.apply_gate_raw(np.diag(np.exp(-1j * phi * coupling * zz)).astype(np.complex64), (i, j))
        # the next layer sweeps back
        edges = edges[::-1]
        for i in range(n):
            circuit.apply_gate_raw(rotation(theta, 1), (i,))
    return circuit.psi


def diagonal_operator(edges: Sequence[tuple[int, int, float]], n: int, spins: int) -> list[tuple]:
    """Return per tensor what D(phi) of these edges needs: its nonzero places, their energies and its shape.

    A bond carries the values of the spins to its left that have edges to its right.
    """
    last = {i: j for i, j, _ in sorted(edges, key=lambda edge: edge[1])}
    carried: list[int] = []
    operator = []
    for first in range(0, n, spins):
        own = list(range(first, first + spins))
        left, here = np.indices((1 << len(carried), 1 << spins))
        bits = {i: left >> k & 1 for k, i in enumerate(carried)} | {i: here >> k & 1 for k, i in enumerate(own[::-1])}
        energy = sum((c * Z[bits[i]] * Z[bits[j]] for i, j, c in edges if j in own), np.zeros(left.shape))
        onward = [i for i in carried + own if last.get(i, 0) > own[-1]]
        right = sum((bits[i] << k for k, i in enumerate(onward)), np.zeros_like(left))
        operator.append(((left, right, here, here), energy, (len(left), 1 << len(onward), 1 << spins, 1 << spins)))
        carried = onward
    return operator


def layer_at_once(case: Case, bond: int, layers: int, cutoff: float, spins: int = 2) -> qtn.MatrixProductState:
    n = case.anneal.instance.n_sites
    # half of the couplings along the cylinder apart: two operators of smaller bonds cost less than one
    halves = [[edge for edge in case.edges if (edge[1] == edge[0] + RING and edge[0] % 4 > 1) == far] for far in (0, 1)]
    operators = [diagonal_operator(half, n, spins) for half in halves]
    state = plus(n // spins, spins)
    for k, (phi, theta) in enumerate(case.angles(layers)):
        for operator in operators:
            arrays = []
            for places, energy, shape in operator:
                arrays.append(np.zeros(shape, np.complex64))
                arrays[-1][places] = np.exp(-1j * phi * energy)
            mpo = qtn.MatrixProductOperator([arrays[0][0], *arrays[1:-1], arrays[-1][:, 0]], shape="lrud")
            # this compression keeps the cap and knows no cutoff
            state.gate_with_mpo_(mpo, method="src", max_bond=bond, cutoff=0.0, seed=k, inplace_mpo=True)
        for site in range(n // spins):
            state.gate_(rotation(theta, spins), site, contract=True)
    return state


def column_by_column(case: Case, bond: int, layers: int, cutoff: float, method: str) -> qtn.MatrixProductState:
    columns = case.anneal.instance.n_sites // RING
    spins = 1 - 2 * (np.arange(1 << RING)[:, None] >> np.arange(RING)[::-1] & 1)
    rings, rails = np.zeros((columns, 1 << RING)), np.zeros((columns - 1, 1 << RING, 1 << RING))
    for i, j, coupling in case.edges:
        a, b = spins[:, i % RING], spins[:, j % RING]
        if i // RING == j // RING:
            rings[i // RING] += coupling * a * b
        else:
            rails[i // RING] += coupling * np.outer(a, b)
    state, centre, right = plus(columns, RING), {"cur_orthog": (0, 0)}, True
    for phi, theta in case.angles(layers):
        for c in range(columns - 1) if right else range(columns - 2, -1, -1):
            gate = np.diag(np.exp(-1j * phi * rails[c].ravel())).astype(np.complex64)
            state.canonicalize_((c, c + 1), info=centre)
            state.gate_split_(
                gate, (c, c + 1), absorb="right" if right else "left", method=method, max_bond=bond, cutoff=cutoff
            )
            centre["cur_orthog"] = (c + right, c + right)
        for c in range(columns):
            local = rotation(theta, RING) * np.exp(-1j * phi * rings[c])
            state.gate_(local.astype(np.complex64), c, contract=True)
        right = not right
    return state


PEERS: dict[str, Callable[[Case, int, int, float], qtn.MatrixProductState]] = {
    "gate by gate": gate_by_gate,
    "layer at once": layer_at_once,
    "column by column": partial(column_by_column, method="svd"),
    "column by column, eigh": partial(column_by_column, method="svd:eig"),
}


@cache
def all_spins(n: int) -> np.ndarray:
    """Return the spins of every basis state; site 0 is the most significant bit, as in quimb's dense vectors."""
    return np.where(np.arange(1 << n)[:, None] >> np.arange(n)[::-1] & 1, -1.0, 1.0)


def correlations(state: qtn.MatrixProductState, n: int) -> np.ndarray:
    """Return <Z_i Z_j>."""
    p = np.abs(np.asarray(state.to_dense()).ravel()) ** 2
    return all_spins(n).T @ (all_spins(n) * (p / p.sum())[:, None])


Measure = Callable[[int, int], tuple[float, float]]
"""CPU seconds and error at a bond dimension and a rung of the ladder of steps."""


def peer(solve: Callable[..., qtn.MatrixProductState], case: Case, cutoff: float, bond: int, rung: int) -> tuple:
    begin = time.process_time()
    state = solve(case, bond, round(LAYERS[rung] * case.anneal.duration), cutoff)
    seconds = time.process_time() - begin
    return seconds, case.error(correlations(state, case.anneal.instance.n_sites))


def ours(precision: str, case: Case, cutoff: float, bond: int, rung: int) -> tuple:
    backend = ar.MPS(bond_dimension=bond, step=float(STEPS[rung]), truncation=cutoff, precision=precision)
    begin = time.process_time()
    zz = backend.evolve(case.anneal).moments().zz.value
    return time.process_time() - begin, case.error(zz)


def tuned(measure: Measure, target: float, limit: float, least: int, first: int) -> tuple[float, int, int, float]:
    """Return seconds, bond dimension, rung and error of the fastest setting that meets the target.

    The smallest bond dimension, from the least on, that meets it at all is taken to its coarsest step, searched from
    the first rung on; a larger one is of use only with a coarser step still. A run beyond the limit in seconds ends
    the search.
    """
    best = (np.inf, 0, 0, np.inf)
    for bond in (bond for bond in BONDS if bond >= least):
        rung = best[2] - 1
        if best[0] == np.inf:
            rung, lowest, idle = first, np.inf, 0
            seconds, error = measure(bond, rung)
            # it may rise by chance at coarse steps; where it twice falls no further, the bond dimension limits it
            while error > target and idle < 2 and rung < len(STEPS) - 1:
                idle = 0 if error < 0.9 * lowest else idle + 1
                lowest = min(lowest, error)
                # where the order is four a rung halves the error
                rung = min(rung + max(1, int(np.log2(error / target))), len(STEPS) - 1)
                seconds, error = measure(bond, rung)
        while rung >= 0:
            seconds, error = measure(bond, rung)
            if error > target:
                break
            best = min(best, (seconds, bond, rung, error))
            rung -= 1
        if seconds > min(best[0], limit) or best[2] == 0 < best[1]:
            break
    return best


def table(length: int, duration: float, seed: int, targets: Sequence[float], contenders: dict[str, Callable]) -> None:
    case = cylinder(length, duration, seed)
    # a smaller error needs no less than the larger one before it
    start = dict.fromkeys(contenders, (BONDS[0], 0))
    for target in targets:
        print(f"4x{length}, T = {duration:g}, seed {seed}, error {target:g}", flush=True)
        own, limit = np.inf, np.inf
        for name, solve in contenders.items():
            # a truncation well below the error, so that the cap decides
            measure = partial(solve, case, target**2 / 100)
            measure(8, 0)
            seconds, bond, rung, error = tuned(cache(measure), target, limit, *start[name])
            if seconds == np.inf:
                print(f"    {name:24s} not reached", flush=True)
                continue
            start[name] = bond, rung
            seconds = min([seconds, *(measure(bond, rung)[0] for _ in range(2 if seconds < 10 else 0))])
            if name.startswith("ours"):
                own, step = min(own, seconds), f"step {STEPS[rung]:.3g}"
            else:
                limit, step = min(limit, BEHIND * seconds), f"{round(LAYERS[rung] * duration)} layers"
            ratio = f" {seconds / own:7.1f} x" if seconds > own else ""
            print(f"    {name:24s} {seconds:8.3f} s, D = {bond}, {step}, error {error:.1e}{ratio}", flush=True)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    group = parser.add_mutually_exclusive_group()
    group.add_argument("--quick", action="store_true", help="4x4 at T = 1, error 1e-2, one seed (the default)")
    group.add_argument("--full", action="store_true", help="4x4 and 4x5 at T = 1 and 5, two seeds")
    parser.add_argument("--peers", action="store_true", help="the gates alone")
    arguments = parser.parse_args()
    warnings.filterwarnings("ignore", message="Couldn't import `kahypar`")
    warnings.filterwarnings("ignore", message="`cutoff` is ignored")
    peers = {name: partial(peer, solve) for name, solve in PEERS.items()}
    mine = {f"ours, {precision}": partial(ours, precision) for precision in ("double", "single")}
    contenders = peers if arguments.peers else mine | peers
    if not arguments.full:
        table(4, 1.0, 11, TARGETS[:1], contenders)
        return
    for length, duration, seed in product((4, 5), (1.0, 5.0), (11, 12)):
        table(length, duration, seed, TARGETS, contenders)


if __name__ == "__main__":
    main()
