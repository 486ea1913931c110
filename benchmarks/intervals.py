"""Are the intervals of the correlation error honest? Coverage, width and verdicts, by simulation on known laws.

    python benchmarks/intervals.py --quick      a few minutes
    python benchmarks/intervals.py --full       about an hour

Truth and processor are known distributions over N spins (random +-1 graphs and chains at an inverse temperature, the
processor a mixture that has the wanted correlation error exactly), so that every interval can be held against the
true value.
Beside the interval that ships stand three tempting ones: percentiles of a bootstrap of the plain error, a standard
error around the plain square, and a jackknife with gaussian tails around the unbiased square.
"""

from __future__ import annotations

import argparse
import itertools
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import stats

from anneal_ref.judgement.correlation_error import CorrelationError
from anneal_ref.judgement.equivalence import judge_error
from anneal_ref.judgement.squared_distance import SquaredDistance, pair_distance
from anneal_ref.observe.clusters import Clusters

LEVEL = 0.95


@dataclass(frozen=True)
class Model:
    """A truth, a processor with a known correlation error, and draws from it."""

    states: np.ndarray
    truth: np.ndarray
    cumulative: np.ndarray
    theta: float
    norm2: float

    def draw(self, shots: int, rng: np.random.Generator) -> np.ndarray:
        """Return shots of the processor."""
        return self.states[np.searchsorted(self.cumulative, rng.random(shots) * self.cumulative[-1], side="right")]


def boltzmann(n: int, kind: str, beta: float, seed: int) -> tuple[np.ndarray, np.ndarray]:
    states = (1 - 2 * ((np.arange(2**n)[:, None] >> np.arange(n)) & 1)).astype(np.int8)
    s, rng = states.astype(np.float32), np.random.default_rng(seed)
    couplings = np.zeros((n, n), dtype=np.float32)
    if kind == "graph":
        couplings = np.triu(rng.choice([-1.0, 1.0], (n, n)), 1).astype(np.float32) / np.float32(np.sqrt(n))
    elif kind == "chain":
        couplings[np.arange(n - 1), np.arange(1, n)] = rng.choice([-1.0, 1.0], n - 1)
    else:
        couplings = -np.triu(np.ones((n, n), dtype=np.float32), 1) / n
    p = np.exp(-beta * np.sum((s @ couplings) * s, axis=1, dtype=float))
    return states, p / p.sum()


def model(n: int, kind: str, beta: float, eps: float, fault: str) -> Model:
    states, p = boltzmann(n, kind, beta, 1)
    s, upper = states.astype(float), np.triu_indices(n, 1)
    t = (s.T * p) @ s
    if fault == "noise":
        q = np.full(len(p), 1 / len(p))
    elif fault == "scale":
        q = p**1.5 / np.sum(p**1.5)
    else:
        q = boltzmann(n, kind, beta, 2)[1] if kind == "graph" else p * np.exp(-s[:, 0] * s[:, 1] * np.sign(t[0, 1]))
        q = q / q.sum()
    c, norm2 = (s.T * q) @ s, float(np.sum(t[upper] ** 2))
    share = min(eps * np.sqrt(norm2 / np.sum((c - t)[upper] ** 2)), 1.0) if eps else 0.0
    mixed = p + share * (q - p)
    theta = float(share**2 * np.sum((c - t)[upper] ** 2))
    return Model(states, t, np.cumsum(mixed), theta, norm2)


Interval = Callable[[np.ndarray, np.ndarray, SquaredDistance, np.random.Generator], tuple[float, float]]


def shipped(spins: np.ndarray, t: np.ndarray, found: SquaredDistance, rng: np.random.Generator) -> tuple[float, float]:
    return found.lower(0.5 + LEVEL / 2), found.upper(0.5 + LEVEL / 2)


def percentile(
    spins: np.ndarray, t: np.ndarray, found: SquaredDistance, rng: np.random.Generator
) -> tuple[float, float]:
    upper = np.triu_indices(spins.shape[1], 1)
    features = (spins[:, upper[0]] * spins[:, upper[1]]).astype(np.float32)
    counts = rng.multinomial(len(spins), np.full(len(spins), 1 / len(spins)), size=100).astype(np.float32)
    squares = np.sum((counts @ features / len(spins) - t[upper]) ** 2, axis=1)
    low, high = np.quantile(squares, [0.5 - LEVEL / 2, 0.5 + LEVEL / 2])
    return float(low), float(high)


def plain(spins: np.ndarray, t: np.ndarray, found: SquaredDistance, rng: np.random.Generator) -> tuple[float, float]:
    half = stats.norm.ppf(0.5 + LEVEL / 2) * found.stat()
    return max(found.raw - half, 0.0), found.raw + half


def gaussian(spins: np.ndarray, t: np.ndarray, found: SquaredDistance, rng: np.random.Generator) -> tuple[float, float]:
    # what a delete-one jackknife of the unbiased square gives, to leading order
    half = stats.norm.ppf(0.5 + LEVEL / 2) * np.sqrt(4 * float(found.spectrum @ found.squares))
    return max(found.value - half, 0.0), max(found.value + half, 0.0)


METHODS: dict[str, Interval] = {"shipped": shipped, "percentile": percentile, "plain": plain, "jackknife": gaussian}


def coverage(repeats: int, sizes: tuple[int, ...], shots: tuple[int, ...], epsilons: tuple[float, ...]) -> None:
    print(f"\nCoverage of nominal {LEVEL:.0%} intervals, {repeats} repetitions; lowest / mean over laws and faults")
    print("(one standard error of a coverage of 95 % is " + f"{100 * np.sqrt(0.05 * 0.95 / repeats):.1f} %)\n")
    print(f"{'N':>3} {'shots':>6} {'eps':>6} | " + " ".join(f"{name:>17}" for name in METHODS) + " | mean upper end")
    summary: dict[str, list[float]] = {name: [] for name in METHODS}
    for n, size, eps in itertools.product(sizes, shots, epsilons):
        held: dict[str, list[float]] = {name: [] for name in METHODS}
        uppers = []
        for kind, beta in (("graph", 1.0), ("graph", 2.5), ("graph", 5.0), ("chain", 0.7)):
            for fault in ("noise", "scale", "other") if eps else ("noise",):
                world = model(n, kind, beta, eps, fault)
                rng = np.random.default_rng([n, size, int(1000 * eps), int(10 * beta), len(fault)])
                inside = dict.fromkeys(METHODS, 0)
                for _ in range(repeats):
                    spins = world.draw(size, rng)
                    found = pair_distance(spins, world.truth, Clusters.of(size))
                    for name, method in METHODS.items():
                        low, high = method(spins, world.truth, found, rng)
                        inside[name] += low <= world.theta * (1 + 1e-9) and world.theta <= high * (1 + 1e-9)
                        if name == "shipped":
                            uppers.append(np.sqrt(high / world.norm2))
                for name in METHODS:
                    held[name].append(inside[name] / repeats)
        cells = " ".join(f"{100 * min(held[name]):>7.1f} /{100 * np.mean(held[name]):>6.1f} %" for name in METHODS)
        print(f"{n:>3} {size:>6} {eps:>6.2f} | {cells} | {np.mean(uppers):.4f}", flush=True)
        for name in METHODS:
            summary[name] += held[name]
    cells = " ".join(f"{100 * min(summary[name]):>7.1f} /{100 * np.mean(summary[name]):>6.1f} %" for name in METHODS)
    print(f"{'all':>17} | {cells} |")


def gauges(repeats: int) -> None:
    print(
        f"\nGauges that differ: N = 6, 1000 shots, {repeats} repetitions; clustered by gauge / taken as independent\n"
    )
    print(f"{'gauges':>7} {'scatter':>8} {'eps':>6} | clustered  independent | bias of eps^2 in its standard errors")
    n = 6
    states, p = boltzmann(n, "graph", 1.0, 1)
    s, upper = states.astype(float), np.triu_indices(n, 1)
    features = s[:, upper[0]] * s[:, upper[1]]
    for count, scatter, eps in itertools.product((3, 5, 10, 20), (0.0, 0.1), (0.0, 0.05, 0.2)):
        rng = np.random.default_rng([count, int(100 * scatter), int(100 * eps)])

        def gauge(rng: np.random.Generator, scatter: float = scatter) -> np.ndarray:
            q = p * np.exp(scatter * features @ rng.standard_normal(features.shape[1]))
            return q / q.sum()

        mean = features.T @ np.mean([gauge(rng) for _ in range(20_000 if scatter else 1)], axis=0)
        offset = rng.standard_normal(len(mean))
        offset *= eps * np.linalg.norm(mean) / np.linalg.norm(offset)
        truth = np.zeros((n, n))
        truth[upper] = mean + offset
        held, values = np.zeros(2), []
        for _ in range(repeats):
            each = 1000 // count
            spins = np.concatenate([states[rng.choice(len(p), each, p=gauge(rng))] for _ in range(count)])
            for k, labels in enumerate((np.repeat(np.arange(count), each), None)):
                found = pair_distance(spins, truth, Clusters.of(len(spins), labels))
                low, high = shipped(spins, truth, found, rng)
                held[k] += low <= offset @ offset * (1 + 1e-9) and offset @ offset <= high * (1 + 1e-9)
                if labels is not None:
                    values.append(found.value)
        bias = (np.mean(values) - offset @ offset) / (np.std(values) / np.sqrt(repeats))
        cells = f"{100 * held[0] / repeats:>8.1f} %  {100 * held[1] / repeats:>9.1f} %"
        print(f"{count:>7} {scatter:>8.2f} {eps:>6.2f} | {cells} | {bias:+.1f}", flush=True)


def verdicts(repeats: int) -> None:
    print(f"\nVerdicts at level 95 %, limit 0.05, N = 8, {repeats} repetitions: accept / reject / inconclusive\n")
    print(f"{'eps':>6} | " + " ".join(f"{f'{shots} shots':>24}" for shots in (1000, 4000, 16000)))
    for eps in (0.0, 0.02, 0.04, 0.05, 0.06, 0.08, 0.12):
        cells = []
        for shots in (1000, 4000, 16000):
            world = model(8, "graph", 1.0, eps, "other")
            rng = np.random.default_rng([shots, int(100 * eps)])
            found = []
            for _ in range(repeats):
                distance = pair_distance(world.draw(shots, rng), world.truth, Clusters.of(shots))
                error = CorrelationError(distance, world.norm2, 0.0)
                found.append(judge_error("correlation_error", error, 0.05, shots).outcome)
            shares = [100 * found.count(outcome) / repeats for outcome in ("accept", "reject", "inconclusive")]
            cells.append(f"{shares[0]:>8.1f} /{shares[1]:>5.1f} /{shares[2]:>5.1f} %")
        print(f"{eps:>6.2f} | " + " ".join(f"{cell:>24}" for cell in cells), flush=True)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    which = parser.add_mutually_exclusive_group()
    which.add_argument("--quick", action="store_true", help="few sizes and repetitions (default)")
    which.add_argument("--full", action="store_true", help="N = 4 to 16, 200 to 10000 shots, 400 repetitions")
    full = parser.parse_args().full
    if full:
        coverage(400, (4, 8, 12, 16), (200, 1000, 10000), (0.0, 0.03, 0.1, 0.3))
    else:
        coverage(200, (4, 8), (200, 1000), (0.0, 0.03, 0.1, 0.3))
    gauges(400 if full else 200)
    verdicts(400 if full else 200)


if __name__ == "__main__":
    main()
