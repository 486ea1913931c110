"""Matrix product states: error against bond dimension, step and precision, on every lattice.

    python benchmarks/truncation.py --quick     three lattices of 16 spins, one seed (minutes)
    python benchmarks/truncation.py --full      all of them, three seeds, T = 1, 5, 20 (hours)

Anneals, exact answers and errors are those of `cases`: the correlation error, pooled over the seeds, with the largest
absolute error of all <Z> and <Z Z> in any seed in brackets. The bond dimension is varied at the default step, the step
at the largest bond dimension; `step` is in units of the phase of the anneal.
"""

from __future__ import annotations

import argparse
import os
from collections.abc import Iterable

import numpy as np
from cases import cylinder, errors, exact, problem, solved

import anneal_ref as ar
from anneal_ref.backends.blas_threads import blas_threads

square = ar.lattices.square
LATTICES = {
    "4x4 cylinder": (cylinder(4, 4), 0.0),
    "cubic 2x2x4": (ar.lattices.cubic(2, 2, 4), 0.0),
    "biclique 8+8": (ar.lattices.biclique(8, 8), 0.0),
    "4x4 cylinder, fields": (cylinder(4, 4), 0.4),
    "biclique 8+8, fields": (ar.lattices.biclique(8, 8), 0.4),
    "diamond 16": (ar.lattices.diamond(2, 2, 2), 0.0),
    "triangular 4x4 cylinder": (ar.lattices.triangular(4, 4, periodic=(False, True)), 0.0),
    "honeycomb 16": (ar.lattices.honeycomb(4, 2), 0.0),
    "5x4 cylinder": (cylinder(5, 4), 0.0),
}
BONDS = (8, 16, 32, 64, 128)


def measured(anneals: list[ar.Anneal], **settings: object) -> str:
    """Return the errors over the anneals."""
    return cell((solved(ar.MPS(**settings), anneal)[1], exact(anneal)) for anneal in anneals)


def cell(results: Iterable[tuple[np.ndarray, np.ndarray]]) -> str:
    pooled, largest = errors(results)
    return f"{pooled:.1e} ({largest:.0e})"


def error_table(names: list[str], durations: list[float], seeds: range) -> None:
    print("\nError against bond dimension at step 1, and against the step at the largest bond dimension")
    columns = [f"D = {bond}" for bond in BONDS] + [f"D = {BONDS[-1]}, step {step}" for step in ("1/2", "1/4")]
    print("| lattice | T (ns) |", " | ".join(columns), "|")
    print("|" + " --- |" * (2 + len(columns)))
    for name in names:
        lattice, fields = LATTICES[name]
        for duration in durations:
            anneals = [problem(lattice, duration, seed, fields) for seed in seeds]
            cells = [measured(anneals, bond_dimension=bond) for bond in BONDS]
            # a slow anneal at a quarter of the step takes very long
            finer = (1, 2) if duration < 10 else (1,)
            cells += [measured(anneals, bond_dimension=BONDS[-1], halvings=k) for k in finer]
            cells += [""] * (2 - len(finer))
            print(f"| {name} | {duration:g} |", " | ".join(cells), "|", flush=True)


def rounding_table(cases: list[tuple[str, float, tuple[int, ...]]], seeds: range) -> None:
    """Print what single precision changes at the same settings, beside the errors of both and the number of updates."""
    print("\nSingle against double precision at the same settings; updates are local exponentials")
    columns = ("lattice", "T (ns)", "D", "step", "updates", "double", "single", "single against double")
    print("|", " | ".join(columns), "|")
    print("|" + " --- |" * len(columns))
    for name, duration, bonds in cases:
        anneals = [problem(LATTICES[name][0], duration, seed) for seed in seeds]
        for bond in bonds:
            for halvings in range(3):
                truth, updates = [exact(anneal) for anneal in anneals], 0
                found: dict[str, list[np.ndarray]] = {"double": [], "single": []}
                for precision, values in found.items():
                    backend = ar.MPS(bond_dimension=bond, precision=precision, halvings=halvings)
                    for anneal in anneals:
                        _, value, state = solved(backend, anneal)
                        values.append(value)
                        updates = max(updates, state.ledger["exponentials"])
                pairs = [(found["double"], truth), (found["single"], truth), (found["single"], found["double"])]
                cells = [cell(zip(*pair, strict=True)) for pair in pairs]
                print(
                    f"| {name} | {duration:g} | {bond} | 1/{2**halvings} | {updates} |",
                    " | ".join(cells),
                    "|",
                    flush=True,
                )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    chosen = parser.add_mutually_exclusive_group()
    chosen.add_argument("--quick", action="store_true", help="three lattices, one seed (default)")
    chosen.add_argument("--full", action="store_true", help="all lattices, three seeds, durations up to 20 ns")
    full = parser.parse_args().full
    print(f"load {os.getloadavg()[0]:.1f}")
    with blas_threads(1):
        if full:
            error_table(list(LATTICES), [1.0, 5.0, 20.0], range(1, 4))
            narrow = [("4x4 cylinder", 1.0, (16,)), ("4x4 cylinder", 5.0, (16,))]
            wide = [("4x4 cylinder", duration, (128,)) for duration in (1.0, 5.0)] + [("4x4 cylinder", 20.0, (64,))]
            rounding_table(
                [*narrow, *wide, ("5x4 cylinder", 1.0, (128, 256)), ("5x4 cylinder", 5.0, (128,))], range(1, 3)
            )
        else:
            error_table(list(LATTICES)[:3], [1.0], range(1, 2))
            rounding_table([("4x4 cylinder", 1.0, (16, 128))], range(1, 2))


if __name__ == "__main__":
    main()
