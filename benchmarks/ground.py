"""Ground energies: size against time and gap, and each method against the others.

python benchmarks/ground.py --quick     a minute
python benchmarks/ground.py --full      some ten minutes
"""

from __future__ import annotations

import argparse
import time

import numpy as np
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import coo_array

import anneal_ref as ar
from anneal_ref import disorder, lattices
from anneal_ref.ground.ground import ground_energy

TORUS = (True, True)
LAWS = {"+-1": disorder.plus_minus(), "gaussian": disorder.gaussian()}


def timed(instance, method, nodes=20):
    start = time.perf_counter()
    result = ground_energy(instance, method=method, nodes=nodes)
    return result, time.perf_counter() - start


def line(name, law, result, seconds, note=""):
    states = "" if result.degeneracy is None else f"{result.degeneracy} states"
    print(
        f"{name:24} {law:9} {result.how:12} {seconds:9.3f} s  {result.value:12.4f}  gap {result.gap:8.2g}  "
        f"{'proved' if result.proved else 'open':7} {states} {note}",
        flush=True,
    )


def plain_programme(instance, nodes=20000):
    """Solve the textbook linearisation by HiGHS without cuts of ours, for comparison; seconds and value."""
    n, m = instance.n_sites, instance.couplings.size
    i, j = instance.lattice.edges.T
    y, row = n + np.arange(m), 4 * np.arange(m)
    entries = [(row, y, 1), (row, i, -1), (row, j, -1), (row + 1, y, 1), (row + 1, i, 1), (row + 1, j, 1)]
    entries += [
        (row + 2, y, -1),
        (row + 2, i, 1),
        (row + 2, j, -1),
        (row + 3, y, -1),
        (row + 3, i, -1),
        (row + 3, j, 1),
    ]
    rows, columns = np.concatenate([e[0] for e in entries]), np.concatenate([e[1] for e in entries])
    signs = np.repeat([float(e[2]) for e in entries], m)
    matrix = coo_array((signs, (rows, columns)), shape=(4 * m, n + m)).tocsr()
    start = time.perf_counter()
    result = milp(
        -2 * np.concatenate([instance.fields, instance.couplings]),
        constraints=LinearConstraint(matrix, -np.inf, np.tile([0.0, 2.0, 0.0, 0.0], m)),
        integrality=np.r_[np.ones(n), np.zeros(m)],
        bounds=Bounds(np.zeros(n + m), np.r_[np.zeros(1), np.ones(n + m - 1)]),
        options={"mip_rel_gap": 0, "node_limit": nodes},
    )
    seconds = time.perf_counter() - start
    return seconds, (np.inf if result.x is None else result.fun + instance.couplings.sum() + instance.fields.sum())


def warm_up():
    small = ar.draw_instance(lattices.complete(12), disorder.plus_minus(), seed=0)
    wide = ar.draw_instance(lattices.complete(12), disorder.gaussian(), seed=0)
    for method in ("enumeration", "strips", "cuts"):
        ground_energy(small, method=method)
        ground_energy(wide, method=method)


def main():
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    size = parser.add_mutually_exclusive_group()
    size.add_argument("--quick", action="store_true", help="small sizes (default)")
    size.add_argument("--full", action="store_true", help="all sizes")
    full = parser.parse_args().full
    warm_up()

    print("Enumeration, complete graphs")
    for n in (20, 24, 28, 30, 32) if not full else (20, 24, 28, 30, 32, 34, 36):
        for law in LAWS:
            instance = ar.draw_instance(lattices.complete(n), LAWS[law], seed=1)
            line(instance.lattice.name, law, *timed(instance, "enumeration"))

    print("Strip elimination")
    shapes = [(8, 8, TORUS), (10, 10, TORUS), (16, 16, (False, False)), (100, 12, (False, True))]
    for nx, ny, periodic in shapes + ([(20, 20, (False, False)), (11, 11, TORUS), (12, 12, TORUS)] if full else []):
        for law in LAWS:
            instance = ar.draw_instance(lattices.square(nx, ny, periodic), LAWS[law], seed=1)
            line(instance.lattice.name, law, *timed(instance, "strips"))

    print("Branch and cut")
    cases = [lattices.square(n, n, TORUS) for n in (8, 10, 12)] + [lattices.square(16, 16)]
    cases += [lattices.cubic(4, 4, 4, (True,) * 3), lattices.random_regular(100, 3, seed=1)]
    if full:
        cases += [lattices.square(20, 20, TORUS), lattices.square(32, 32), lattices.cubic(5, 5, 5, (True,) * 3)]
        cases += [lattices.biclique(20, 20), lattices.complete(40)]
    for lattice in cases:
        for law in LAWS:
            instance = ar.draw_instance(lattice, LAWS[law], seed=1)
            # on dense graphs the bound is weak, and more nodes hardly help
            nodes = 1 if len(lattice.edges) > 4 * lattice.n_sites else 20
            line(instance.lattice.name, law, *timed(instance, "cuts", nodes))
    for law in LAWS:
        instance = ar.draw_instance(lattices.square(12, 12, TORUS), LAWS[law], fields=LAWS[law], seed=1)
        line(f"{instance.lattice.name}, fields", law, *timed(instance, "cuts"))

    print("Branch and cut against the plain linear form by HiGHS, one draw each")
    for side in (6, 8) if not full else (6, 8, 10):
        for law in LAWS:
            instance = ar.draw_instance(lattices.square(side, side, TORUS), LAWS[law], seed=1)
            result, seconds = timed(instance, "cuts")
            plain, value = plain_programme(instance)
            line(
                instance.lattice.name,
                law,
                result,
                seconds,
                f"plain {plain:.2f} s, {value:.4f}, ratio {plain / seconds:.0f}",
            )


if __name__ == "__main__":
    main()
