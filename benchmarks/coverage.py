"""Error bars of references by matrix product states: whether they are honest, and useful.

    python benchmarks/coverage.py --quick      24 anneals, minutes
    python benchmarks/coverage.py --full       216 anneals and a few of 25 spins, an hour or more; --part k/n: a share

Anneals with known answers (state vector at 1e-10, free fermions for chains) are referenced by `MPS` at tolerances of
1e-2 and 1e-3. Counted are all entries of <Z>, <ZZ> and <X> that symmetry does not fix: how many errors lie within their
bars, in how many anneals that holds for the entry that is worst, how far bars and errors are apart, and the same for
derived numbers. Intervals come from a bootstrap over anneals. Three kinds of wrong bars must fail.

Families, schedules and durations are others than those on which the constants of `anneal_ref.truth.errors` were chosen
(cylinders 3x4 and 4x4, cubic 2x2x3, biclique 6+6, 3- and 4-regular graphs, triangular 3x4, honeycomb 2x3, complete 12,
ladder 7, diamond 2x2x1, ring 14; two polynomial and one linear schedule; 0.5, 1, 2.5 and 7 ns).
"""

import os

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import argparse  # noqa: E402
import pickle  # noqa: E402
from collections.abc import Iterator  # noqa: E402
from dataclasses import dataclass  # noqa: E402
from pathlib import Path  # noqa: E402

import numpy as np  # noqa: E402
from numpy.typing import NDArray  # noqa: E402

import anneal_ref as ar  # noqa: E402
from anneal_ref.truth.choosing import default_mps  # noqa: E402
from anneal_ref.truth.evolutions import free_entries  # noqa: E402

TABLE = ar.Schedule.from_table(
    [0, 0.1, 0.25, 0.4, 0.55, 0.7, 0.85, 1],
    [1.6, 1.25, 0.8, 0.42, 0.17, 0.05, 0.01, 0],
    [0.01, 0.08, 0.22, 0.4, 0.62, 0.8, 0.95, 1.05],
    unit="GHz",
)
SQUARES = ar.Schedule.polynomial(transverse=(7, -14, 7), problem=(0, 1, 4))
BROKEN = ar.Schedule.from_table([0, 0.5, 1], [6, 1.5, 0], [0, 2.0, 6.0], unit="rad/ns", interpolation="linear")
PAUSE = ar.Waveform([0, 0.45, 0.55, 1], [0, 0.5, 0.5, 1])
TOLERANCES = (1e-2, 1e-3)


def graphs(full: bool) -> list[ar.Lattice]:
    found = [
        ar.lattices.square(3, 5, periodic=(False, True)),
        ar.lattices.cubic(2, 2, 4),
        ar.lattices.biclique(5, 8),
        ar.lattices.random_regular(16, 3, seed=11),
        ar.lattices.triangular(4, 4),
        ar.lattices.honeycomb(3, 3, periodic=(False, True)),
        ar.lattices.complete(13),
        ar.lattices.square(3, 4).diluted(dead=[5]),
        ar.lattices.diamond(2, 2, 2),
        ar.lattices.chain(18),
        ar.lattices.random_regular(14, 4, seed=7),
        ar.lattices.square(4, 5, periodic=(False, True)) if full else ar.lattices.square(4, 3),
    ]
    return found if full else [lattice for lattice in found if lattice.n_sites <= 16]


def catalogue(count: int, full: bool) -> Iterator[ar.Anneal]:
    """Give anneals whose every choice is drawn from a fixed seed."""
    random = np.random.default_rng(20_26)
    laws = [ar.disorder.plus_minus(), ar.disorder.gaussian(0.7), ar.disorder.uniform(0.3, 1.2), ar.disorder.levels(2)]
    fields = [None, None, ar.disorder.uniform(-0.5, 0.5)]
    weights = [None, None, ar.disorder.uniform(0.8, 1.2)]
    lattices = graphs(full)
    for k in range(count):
        instance = ar.draw_instance(
            lattices[k % len(lattices)], laws[random.integers(4)], fields[random.integers(3)],
            weights[random.integers(3)], seed=3000 + k,
        )  # fmt: skip
        schedule = (TABLE, SQUARES, BROKEN)[random.integers(3)]
        duration = float((0.7, 1.5, 4.0, 10.0)[random.integers(4)])
        yield ar.Anneal(instance, schedule, duration, waveform=PAUSE if random.integers(6) == 0 else None)


def large() -> Iterator[ar.Anneal]:
    """Give a few anneals of 25 spins, and chains of 64 that free fermions solve."""
    for seed, duration in ((1, 0.7), (2, 1.5), (3, 4.0)):
        lattice = ar.lattices.square(5, 5, periodic=(False, True))
        yield ar.Anneal(ar.draw_instance(lattice, ar.disorder.plus_minus(), seed=seed), SQUARES, duration)
    for seed, duration in ((4, 1.5), (5, 4.0), (6, 10.0)):
        instance = ar.draw_instance(ar.lattices.chain(64), ar.disorder.uniform(0.2, 1.2), seed=seed)
        yield ar.Anneal(instance, TABLE, duration)


@dataclass(frozen=True)
class Result:
    """Errors and bars of one reference."""

    name: str
    tolerance: float
    outcome: str
    errors: NDArray[np.float64]
    bars: NDArray[np.float64]
    derived_errors: NDArray[np.float64]
    derived_bars: NDArray[np.float64]
    discarded: float
    bond: int


def solve(anneal: ar.Anneal, tolerance: float, budget: float) -> Result:
    """Make the reference of one anneal, and compare it with what is known."""
    chain = anneal.n_sites > 25
    exact = (ar.FreeFermions(tolerance=1e-9) if chain else ar.StateVector(tolerance=1e-10)).evolve(anneal).moments()
    truth = ar.reference(anneal, tolerance, backend=default_mps(tolerance), samples=1, budget=budget)
    found = truth.moments()
    bars = [free_entries(anneal, _bars(found))]
    errors = [np.abs(free_entries(anneal, found) - free_entries(anneal, exact))]
    ground = float(truth.ground.value)
    derived = []
    for f in (
        lambda moments: ar.observables.problem_energy(moments, anneal.instance) / anneal.n_sites,
        lambda moments: (ar.observables.problem_energy(moments, anneal.instance) - ground) / anneal.n_sites,
        ar.observables.q2,
    ):
        estimate = truth.estimate(f)
        derived.append((abs(float(estimate.value) - float(f(exact))), float(estimate.num)))
    return Result(
        f"{anneal.instance.name}, {anneal.duration:g}", tolerance, truth.outcome, np.concatenate(errors),
        np.concatenate(bars), np.array([d[0] for d in derived]), np.array([d[1] for d in derived]),
        float(truth.ledger["discarded_weight"]), int(truth.ledger["largest_bond"]),
    )  # fmt: skip


def _bars(moments: ar.Moments) -> ar.Moments:
    zz = moments.zz.num.copy()
    np.fill_diagonal(zz, 1.0)
    return ar.Moments.of(moments.z.num, zz, None if moments.x is None else moments.x.num)


def figures(results: list[Result]) -> dict[str, float]:
    """Return the figures of merit of some results."""
    errors, bars = (np.concatenate([getattr(one, name) for one in results]) for name in ("errors", "bars"))
    worst = [one.errors.max() <= one.bars[one.errors.argmax()] for one in results]
    derived = np.concatenate([one.derived_errors <= one.derived_bars for one in results])
    ranks = [np.argsort(np.argsort(values)) for values in (errors, bars)]
    return {
        "covered": float(np.mean(errors <= bars)),
        "worst entry covered": float(np.mean(worst)),
        "derived covered": float(np.mean(derived)),
        "bar / error": float(np.median(bars) / np.median(errors)),
        "rank correlation": float(np.corrcoef(*ranks)[0, 1]),
    }


def intervals(results: list[Result], repetitions: int = 400) -> dict[str, tuple[float, float]]:
    """Return 95 % intervals from a bootstrap over anneals."""
    random = np.random.default_rng(1)
    draws = [figures([results[k] for k in random.integers(0, len(results), len(results))]) for _ in range(repetitions)]
    return {name: tuple(np.quantile([draw[name] for draw in draws], (0.025, 0.975))) for name in draws[0]}


def passes(results: list[Result]) -> bool:
    """Return whether bars are honest and useful."""
    found = figures(results)
    return found["covered"] >= 0.95 and found["worst entry covered"] >= 0.9 and found["bar / error"] <= 5


def spoiled(results: list[Result], kind: str) -> list[Result]:
    """Return the results with wrong bars."""
    middle = float(np.median(np.concatenate([one.bars for one in results])))
    bars = {
        "a tenth": lambda one: one.bars / 10,
        "constant": lambda one: np.full_like(one.bars, middle),
        "discarded weight alone": lambda one: np.full_like(one.bars, one.discarded),
        "root of the discarded weight": lambda one: np.full_like(one.bars, one.discarded**0.5),
    }[kind]
    return [Result(**{**one.__dict__, "bars": bars(one)}) for one in results]


def report(results: list[Result]) -> None:
    for tolerance in TOLERANCES:
        some = [one for one in results if one.tolerance == tolerance]
        done = [one for one in some if one.outcome == "converged"]
        missed = len(some) - len(done)
        print(f"\ntolerance {tolerance:g}: {len(done)} converged, {missed} not converged (their bars count as well)")
        found, limits = figures(some), intervals(some)
        for name, value in found.items():
            print(f"  {name:<22}{value:8.3f}   ({limits[name][0]:.3f} to {limits[name][1]:.3f})")
        print(f"  honest and useful: {passes(some)}")
        for kind in ("a tenth", "constant", "discarded weight alone", "root of the discarded weight"):
            wrong = spoiled(some, kind)
            numbers = figures(wrong)
            print(
                f"  wrong bars, {kind}: covered {numbers['covered']:.3f}, worst {numbers['worst entry covered']:.3f}, "
                f"bar / error {numbers['bar / error']:.2g}, passes: {passes(wrong)}"
            )
        bad = [one for one in some if np.mean(one.errors <= one.bars) < 0.9]
        for one in bad[:10]:
            print(f"  least honest: {one.name}: {np.mean(one.errors <= one.bars):.2f} covered, bond {one.bond}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true")
    parser.add_argument("--full", action="store_true")
    parser.add_argument("--part", default="0/1", help="k/n: every n-th anneal from the k-th on")
    parser.add_argument("--store", type=Path, help="folder for the results of the parts; the report takes all in it")
    options = parser.parse_args()
    share, of = (int(number) for number in options.part.split("/"))
    anneals = [*catalogue(216, True), *large()] if options.full else list(catalogue(24, False))
    results = []
    for k, anneal in enumerate(anneals):
        if k % of != share:
            continue
        for tolerance in TOLERANCES:
            results.append(solve(anneal, tolerance, budget=300.0))
            one = results[-1]
            print(
                f"{k:3d} {one.name:<60} {tolerance:g} {one.outcome:<14} bond {one.bond:4d} largest error "
                f"{one.errors.max():.1e}, covered {np.mean(one.errors <= one.bars):.3f}", flush=True,
            )  # fmt: skip
        if options.store:
            options.store.mkdir(parents=True, exist_ok=True)
            (options.store / f"{share}-{of}.pickle").write_bytes(pickle.dumps(results))
    if options.store:
        results = [one for path in sorted(options.store.glob("*.pickle")) for one in pickle.loads(path.read_bytes())]
    report(results)


if __name__ == "__main__":
    main()
