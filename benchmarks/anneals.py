"""Matrix product states: whole anneals, their time to an error and, beyond the state vector, what refinement says.

    python benchmarks/anneals.py --quick     4x5 cylinder, T = 1, one seed (a minute)
    python benchmarks/anneals.py --full      4x5 and 5x5 at T = 1, 5, 20, three seeds; 6x6 at T = 1 and 5 (hours)

Anneals, exact answers and errors are those of `cases`. Times are CPU times of one thread for the evolution and all
correlations; the order of the sites is searched once for a lattice, before. The time to an error is the least over a
grid of bond dimensions and steps (in units of the phase of the anneal, half an octave apart); single precision is then
timed at the same setting, and its own error is given.

On 6x6 no exact answer is at hand. Differences from half the bond dimension, from half the step and between precisions
are given instead, as a correlation error and, in brackets, the largest of any entry.
"""

from __future__ import annotations

import argparse
import os
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from cases import cylinder, errors, exact, problem, solved

import anneal_ref as ar
from anneal_ref.backends.blas_threads import blas_threads

BONDS = (6, 8, 12, 16, 24, 32, 48, 64, 96, 128, 192, 256)
STEPS = tuple(2 ** (1.5 - k / 2) for k in range(6))
TARGETS = (1e-2, 1e-3)
# an error that has fallen by less over two bond dimensions has met the floor of its step
FALL = 0.7


@dataclass(frozen=True, order=True)
class Found:
    """A run that meets a target; the fastest comes first."""

    seconds: float
    bond: int
    step: float
    error: float


def fastest(measure: Callable[[int, float], tuple[float, float]], target: float) -> Found | None:
    """Return the fastest run on the grid that meets the target.

    A finer step pays only with a smaller bond dimension, and no more where that has stopped to be faster.
    """
    best: Found | None = None
    for step in STEPS:
        met, fallen = False, [np.inf, np.inf]
        for bond in BONDS:
            if best is not None and bond >= best.bond:
                break
            seconds, error = measure(bond, step)
            if error <= target:
                met = True
                best = min(best or Found(seconds, bond, step, error), Found(seconds, bond, step, error))
                break
            if (best is not None and seconds > best.seconds) or (error < 0.1 and error > FALL * fallen[0]):
                break
            fallen = [fallen[1], error]
        if best is not None and not met:
            break
    return best


def time_table(cylinders: list[tuple[int, int]], durations: list[float], seeds: range) -> None:
    print(f"\nTime to a correlation error, one thread (load {os.getloadavg()[0]:.1f})")
    print("| cylinder | T (ns) | seed | target | D | step | double | its error | single | its error |")
    print("|" + " --- |" * 10)
    for length, ring in cylinders:
        for duration in durations:
            for seed in seeds:
                anneal = problem(cylinder(length, ring), duration, seed)

                def run(precision: str, bond: int, step: float, anneal: ar.Anneal = anneal) -> tuple[float, float]:
                    backend = ar.MPS(bond_dimension=bond, step=step, precision=precision)
                    seconds, values, _ = solved(backend, anneal)
                    return seconds, errors([(values, exact(anneal))])[0]

                measure = cache(lambda bond, step, run=run: run("double", bond, step))
                for target in TARGETS:
                    best = fastest(measure, target)
                    name = f"| {ring}x{length} | {duration:g} | {seed} | {target:g} |"
                    if best is None:
                        print(name, "not reached |", flush=True)
                        continue
                    again = [run(precision, best.bond, best.step) for precision in ("double", "single")]
                    print(
                        f"{name} {best.bond} | {best.step:.2g} | {min(again[0][0], best.seconds):.2f} s | "
                        f"{best.error:.1e} | {again[1][0]:.2f} s | {again[1][1]:.1e} |",
                        flush=True,
                    )


def whole_table(length: int, ring: int, durations: list[float], bonds: list[int], seed: int = 1) -> None:
    print(f"\nWhole anneals, {ring}x{length} cylinder, seed {seed}, step 1, one thread (load {os.getloadavg()[0]:.1f})")
    columns = ("T (ns)", "D", "double", "single", "discarded weight", "D against D/2", "step 1 against 1/2")
    print("|", " | ".join(columns), "| single against double |")
    print("|" + " --- |" * (1 + len(columns)))
    for duration in durations:
        anneal, half = problem(cylinder(length, ring), duration, seed), None
        for bond in bonds:
            seconds, values, state = solved(ar.MPS(bond_dimension=bond), anneal)
            fast, single, _ = solved(ar.MPS(bond_dimension=bond, precision="single"), anneal)
            finer = solved(ar.MPS(bond_dimension=bond, halvings=1), anneal)[1] if bond < bonds[-1] else None
            cells = [cell(half, values), cell(values, finer), cell(single, values)]
            weight = state.ledger["discarded_weight"]
            print(f"| {duration:g} | {bond} | {seconds:.1f} s | {fast:.1f} s | {weight:.1e} |", *cells, flush=True)
            half = values


def cell(found: np.ndarray | None, truth: np.ndarray | None) -> str:
    if found is None or truth is None:
        return "|"
    pooled, largest = errors([(found, truth)])
    return f"{pooled:.1e} ({largest:.0e}) |"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    chosen = parser.add_mutually_exclusive_group()
    chosen.add_argument("--quick", action="store_true", help="4x5 at T = 1, one seed (default)")
    chosen.add_argument("--full", action="store_true", help="4x5, 5x5 and 6x6, up to T = 20")
    full = parser.parse_args().full
    with blas_threads(1):
        # compiled or loaded now
        for precision in ("double", "single"):
            solved(ar.MPS(bond_dimension=4, precision=precision), problem(cylinder(3, 3), 1.0, seed=1))
        if full:
            time_table([(5, 4), (5, 5)], [1.0, 5.0, 20.0], range(1, 4))
            whole_table(6, 6, [1.0, 5.0], [32, 64, 128, 256])
        else:
            time_table([(5, 4)], [1.0], range(1, 2))


if __name__ == "__main__":
    main()
