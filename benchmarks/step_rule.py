"""The step rule of the state vector: constants from a fit set, coverage on a held-out set.

    python benchmarks/step_rule.py --quick     a tenth of the cases, held-out coverage only (seconds)
    python benchmarks/step_rule.py --full      the fit and the coverage on both sets (about a minute)

For each anneal and splitting the error over all <Z> and <ZZ> is measured against a run with at least ten times finer
steps. The fit gives the slope of `steps = slope * tolerance^(-1/order) * phase` that 97 % of the fit set stays below.
Coverage is the share of (anneal, tolerance) pairs whose true error stays within the tolerance when the shipped rule
chooses the steps.
"""

from __future__ import annotations

import argparse

import numpy as np

import anneal_ref as ar
from anneal_ref.backends.exact.splitting import BLANES_MOAN_4, BLANES_MOAN_6, SPLITTINGS, STRANG
from anneal_ref.backends.exact.steps import SLOPES
from anneal_ref.backends.phase import phase_mesh

COVERED = 0.97
TOLERANCES = {
    STRANG.name: [1e-3, 1e-4],
    BLANES_MOAN_4.name: [1e-3, 1e-4, 1e-5, 1e-6, 1e-7],
    BLANES_MOAN_6.name: [1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9, 1e-10],
}
SIZES = {"fit": [8], "held-out": [7, 9, 10]}
SEEDS = {"fit": 2024, "held-out": 777}
# pauses and fast endings
WAVEFORMS = {
    "fit": [ar.Waveform([0, 0.3, 0.6, 1], [0, 0.4, 0.4, 1]), ar.Waveform([0, 0.85, 1], [0, 0.4, 1])],
    "held-out": [ar.Waveform([0, 0.5, 0.8, 1], [0, 0.35, 0.45, 1]), ar.Waveform([0, 0.93, 1], [0, 0.6, 1])],
}


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
        return ar.Schedule.polynomial(
            transverse * np.array([1.0, -3.0, 3.0, -1.0]), problem * np.array([0.0, 0.05, 0.95])
        )
    if kind == 1:
        return ar.Schedule.linear((transverse, 0.0), (0.0, problem))
    if kind == 2:
        return ar.Schedule.from_table(s, transverse * np.exp(-5 * s) * (1 - s), problem * s**2)
    return ar.Schedule.from_table(
        s, transverse * (1 - s) ** 1.5, problem * np.sin(np.pi * s / 2), interpolation="linear"
    )


def anneals(which: str, count: int) -> list[ar.Anneal]:
    """Draw anneals over graphs, laws, fields, weights, durations from 0.1 to 50, schedules and waveforms."""
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
            int(generator.integers(4 if held else 3)),
            generator.choice([3.0, 10.0, 20.0]),
            generator.choice([3.0, 8.0, 12.0]),
            generator,
        )
        waveform = None
        if generator.random() < 0.25:
            waveform = WAVEFORMS[which][int(generator.integers(2))]
        drawn.append(ar.Anneal(ar.Instance(graph, couplings, fields, weights), path, duration, waveform=waveform))
    return drawn


def values(backend: ar.StateVector, anneal: ar.Anneal) -> np.ndarray:
    moments = backend.evolve(anneal).moments()
    return np.append(moments.z.value, moments.zz.value.ravel())


def truth(anneal: ar.Anneal) -> np.ndarray:
    return values(ar.StateVector(tolerance=1e-10, halvings=2), anneal)


def needed_slopes(anneal: ar.Anneal, name: str, exact: np.ndarray) -> list[float]:
    """Return density * tolerance^(1/order) for each tolerance, where the error stays below it from."""
    order, tolerances = SPLITTINGS[name].order, TOLERANCES[name]
    phase = phase_mesh(anneal).total
    densities, errors = [], []
    density = 0.3 * SLOPES[name] * max(tolerances) ** (-1 / order)
    while density < 5 * SLOPES[name] * min(tolerances) ** (-1 / order) and (not errors or errors[-1] > min(tolerances)):
        found = values(ar.StateVector(scheme=name, steps=max(1, round(density * phase))), anneal)
        densities.append(density)
        errors.append(np.abs(found - exact).max())
        density *= 1.1
    slopes = []
    for tolerance in tolerances:
        above = np.flatnonzero(np.array(errors) >= tolerance)
        first = above[-1] + 1 if len(above) else 0
        if first < len(densities):
            slopes.append(densities[first] * tolerance ** (1 / order))
    return slopes


def fit(count: int) -> None:
    cases = [(anneal, truth(anneal)) for anneal in anneals("fit", count)]
    for name in SPLITTINGS:
        slopes = np.array([slope for anneal, exact in cases for slope in needed_slopes(anneal, name, exact)])
        print(
            f"{name:14s} {len(slopes)} points: median slope {np.median(slopes):.4f}, scatter of its logarithm "
            f"{np.log(slopes).std():.2f}, {COVERED:.0%} quantile {np.quantile(slopes, COVERED):.4f}; "
            f"shipped: {SLOPES[name]}"
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
    print(
        f"  all: within {np.mean(np.array(total) <= 1):.4f} of {len(total)}, "
        f"error / tolerance median {np.median(total):.3f}, largest {max(total):.2f}"
    )


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
