"""The step rule of the state vector: constants from a fit set, coverage on a held-out set.

    python benchmarks/step_rule.py --quick     a tenth of the cases, held-out coverage only (a minute)
    python benchmarks/step_rule.py --full      the fit and the coverage on both sets (about twenty minutes)

For each anneal and splitting the error over all <Z> and <ZZ> is measured against a run with at least ten times finer steps. The
fit finds slope and offset of `steps = slope * tolerance^(-1/order) * (phase + offset)` and raises the slope by a margin of 1.4.
Coverage is the share of (anneal, tolerance) pairs whose true error stays within the tolerance when the shipped rule chooses the steps.
"""

from __future__ import annotations

import argparse

import numpy as np
from scipy.optimize import least_squares

import anneal_ref as ar
from anneal_ref.backends.exact.splitting import BLANES_MOAN_4, BLANES_MOAN_6, SPLITTINGS, STRANG
from anneal_ref.backends.exact.steps import RULES, phase_mesh

MARGIN = 1.4
TOLERANCES = {
    STRANG.name: [1e-3, 1e-4],
    BLANES_MOAN_4.name: [1e-3, 1e-4, 1e-5, 1e-6, 1e-7],
    BLANES_MOAN_6.name: [1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9, 1e-10],
}
SIZES = {"fit": [8], "held-out": [7, 9, 10]}
SEEDS = {"fit": 2024, "held-out": 777}


def lattice(kind: str, n: int, seed: int) -> ar.Lattice:
    if kind == "chain":
        return ar.lattices.chain(n)
    if kind == "ring":
        return ar.lattices.chain(n, periodic=True)
    if kind == "dense":
        return ar.lattices.complete(n)
    if kind == "biclique":
        return ar.lattices.biclique(n // 2, n - n // 2)
    if kind == "cylinder":
        return ar.lattices.square(2, n // 2, periodic=(False, n // 2 > 2))
    generator = np.random.default_rng(seed)
    pairs = [(i, j) for j in range(n) for i in range(j)]
    edges = [pair for pair in pairs if generator.random() < 3 / n] or [(0, 1)]
    return ar.lattices.from_edges(n, edges)


def schedule(kind: int, transverse: float, problem: float, generator: np.random.Generator) -> ar.Schedule:
    rows = int(generator.choice([11, 41, 201]))
    s = np.linspace(0, 1, rows)
    if kind == 0:
        return ar.Schedule.polynomial(transverse * np.array([1.0, -3.0, 3.0, -1.0]), problem * np.array([0.0, 0.05, 0.95]))
    if kind == 1:
        return ar.Schedule.linear((transverse, 0.0), (0.0, problem))
    if kind == 2:
        return ar.Schedule.from_table(s, transverse * np.exp(-5 * s) * (1 - s), problem * s**2)
    return ar.Schedule.from_table(
        s, transverse * (1 - s) ** 1.5, problem * np.sin(np.pi * s / 2), interpolation="linear"
    )


def anneals(which: str, count: int) -> list[ar.Anneal]:
    """Draw anneals over graphs, laws, fields, weights, durations of 0.1 to 50 and schedules, waveforms with pauses among them."""
    generator = np.random.default_rng(SEEDS[which])
    held = which == "held-out"
    kinds = ["cylinder", "chain", "dense", "dense-normalised", "random", "biclique", "ring"]
    drawn = []
    for k in range(count):
        n = int(generator.choice(SIZES[which]))
        kind = kinds[k % len(kinds)]
        graph = lattice(kind.split("-")[0], n, seed=k)
        n, m = graph.n_sites, len(graph.edges)
        couplings = generator.choice([-1.0, 1.0], m) if k // len(kinds) % 2 else generator.normal(size=m)
        if kind in ("dense-normalised", "biclique"):
            couplings = couplings / np.sqrt(n)
        strength = generator.choice([0.0, 0.0, 0.5, 1.5])
        fields = strength * generator.normal(size=n)
        weights = np.ones(n) if generator.random() < 0.6 else generator.uniform(0.3, 1.7, n)
        duration = float(10 ** generator.uniform(-1, 1.7 if held else 1.5))
        path = schedule(
            int(generator.integers(4 if held else 3)), generator.choice([3.0, 10.0, 20.0]), generator.choice([3.0, 8.0, 12.0]), generator
        )
        waveform = None
        if generator.random() < 0.25:
            u, s = ([0, 0.5, 0.8, 1], [0, 0.35, 0.45, 1]) if held else ([0, 0.3, 0.6, 1], [0, 0.4, 0.4, 1])
            waveform = ar.Waveform(u, s)
        drawn.append(ar.Anneal(ar.Instance(graph, couplings, fields, weights), path, duration, waveform=waveform))
    return drawn


def values(backend: ar.StateVector, anneal: ar.Anneal) -> np.ndarray:
    moments = backend.evolve(anneal).moments()
    return np.append(moments.z.value, moments.zz.value.ravel())


def truth(anneal: ar.Anneal) -> np.ndarray:
    return values(ar.StateVector(tolerance=1e-10, halvings=2), anneal)


def needed_steps(anneal: ar.Anneal, name: str, exact: np.ndarray) -> list[tuple[float, float]]:
    """Return (tolerance, steps) pairs, the fewest steps beyond which the error stays below the tolerance."""
    phase = phase_mesh(anneal).total
    steps, errors = [], []
    density, ceiling = 0.15, 8000 if name == STRANG.name else 800
    while density * (phase + 2) < ceiling * max(1.0, phase / 50) and (not errors or errors[-1] > min(TOLERANCES[name])):
        backend = ar.StateVector(scheme=name, steps=max(1, round(density * (phase + 2))))
        state = backend.evolve(anneal)
        steps.append(state.ledger["steps"])
        errors.append(np.abs(np.append(state.moments().z.value, state.moments().zz.value.ravel()) - exact).max())
        density *= 1.25 if name == STRANG.name else 1.12
    pairs = []
    for tolerance in TOLERANCES[name]:
        above = np.flatnonzero(np.array(errors) >= tolerance)
        first = above[-1] + 1 if len(above) else 0
        if first < len(steps):
            pairs.append((tolerance, float(steps[first])))
    return pairs


def fit(count: int) -> None:
    cases = [(anneal, truth(anneal), phase_mesh(anneal).total) for anneal in anneals("fit", count)]
    for name, splitting in SPLITTINGS.items():
        points = [
            (tolerance, phase, steps)
            for anneal, exact, phase in cases
            for tolerance, steps in needed_steps(anneal, name, exact)
        ]
        tolerance, phase, steps = np.array(points).T

        def logs(q, tolerance=tolerance, phase=phase, steps=steps, order=splitting.order):
            return np.log(steps) - np.log(q[0] * tolerance ** (-1 / order) * (phase + q[1]))

        found = least_squares(logs, [0.1, 2.0], loss="soft_l1", f_scale=0.2, bounds=([0, 0], [1, 10]))
        rest = logs(found.x)
        print(
            f"{name:14s} {len(points)} points: slope {found.x[0]:.4f} (x {MARGIN} = {MARGIN * found.x[0]:.4f}), offset "
            f"{found.x[1]:.2f}, scatter of log steps {rest.std():.2f}, 97.5 % quantile {np.quantile(rest, 0.975):.2f}; "
            f"shipped: slope {RULES[name].slope}, offset {RULES[name].offset}"
        )


def coverage(which: str, count: int) -> None:
    cases = [(anneal, truth(anneal)) for anneal in anneals(which, count)]
    print(f"{which}: {len(cases)} anneals")
    total = []
    for tolerance in (1e-2, 1e-3, 1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9, 1e-10):
        ratios = []
        schemes = set()
        for anneal, exact in cases:
            state = ar.StateVector(tolerance=tolerance).evolve(anneal)
            schemes.add(state.ledger["scheme"])
            found = np.append(state.moments().z.value, state.moments().zz.value.ravel())
            ratios.append(np.abs(found - exact).max() / tolerance)
        total += ratios
        print(
            f"  tolerance {tolerance:.0e} ({', '.join(sorted(schemes))}): within {np.mean(np.array(ratios) <= 1):.3f}, "
            f"error / tolerance median {np.median(ratios):.3f}, largest {max(ratios):.2f}"
        )
    print(f"  all: within {np.mean(np.array(total) <= 1):.4f} of {len(total)}, median {np.median(total):.3f}, largest {max(total):.2f}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    group = parser.add_mutually_exclusive_group()
    group.add_argument("--quick", action="store_true", help="a few held-out anneals (the default)")
    group.add_argument("--full", action="store_true", help="the fit, and coverage on both sets")
    if parser.parse_args().full:
        fit(56)
        coverage("fit", 56)
        coverage("held-out", 84)
    else:
        coverage("held-out", 12)


if __name__ == "__main__":
    main()
