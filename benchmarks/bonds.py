"""Matrix product states: time of a step against the bond dimension, and what symmetry, precision and threads are worth.

    python benchmarks/bonds.py --quick     5x5 cylinder up to bond dimension 64, products at 128 (a minute)
    python benchmarks/bonds.py --full      5x5 and 6x6 cylinders up to 256 (half an hour)

A step is a sweep to the right and one to the left, over 0.1 ns from s = 0.55 on in an anneal of 2 ns (see `cases`),
with the limits that `MPS` sets by default, from a state whose bonds are all as wide as the cap or the chain lets them.
That state was grown in single precision, so it serves for costs, not for physics; every contender starts from the same
tensors, written in double precision or without the symmetry. A *mixed* step is what `MPS` takes on average: one in
four updates all bonds by two sites, the others by one.

One-thread times are CPU times of the thread, two-thread times are wall times; each is the least of several repeats,
taken in turn. Products are timed from inside: in a process of its own, the `gemm` that the kernels call is exchanged
for one that counts time and operations (8 a complex multiplication and addition) of the same step.
"""

from __future__ import annotations

import argparse
import ctypes
import multiprocessing
import os
import time
from collections.abc import Callable, Hashable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import partial
from typing import TypeVar

import numpy as np
from cases import cylinder, problem
from llvmlite import binding
from numba.extending import get_cython_function_address
from scipy.linalg import blas
from threadpoolctl import threadpool_info

import anneal_ref as ar
from anneal_ref.backends.blas_threads import blas_threads
from anneal_ref.backends.mps.chain import Chain, Limits
from anneal_ref.backends.mps.mps import REFRESH
from anneal_ref.backends.mps.ordering import best_order
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.start import plus_state
from anneal_ref.backends.mps.steps import sweep_strengths

DURATION, STEPS, PLACE = 2.0, 20, 11
DTYPES = {"double": np.complex128, "single": np.complex64}
GEMMS = {"double": "zgemm", "single": "cgemm"}
# what `MPS` makes of its default truncation
TRUNCATION, KRYLOV = 1e-12, {"double": 1e-8, "single": 1e-7}

Key = TypeVar("Key", bound=Hashable)


def step(chain: Chain, anneal: ar.Anneal, number: int, two_site: bool) -> None:
    for strengths in sweep_strengths(anneal, DURATION * number / STEPS, DURATION * (number + 1) / STEPS):
        chain.sweep(1.0, strengths, two_site)
        chain.flip()


@dataclass(frozen=True, eq=False)
class Subject:
    """A state with wide bonds on a cylinder as long as it is around."""

    length: int
    bond: int
    product: Product

    def __str__(self) -> str:
        return f"{self.length}x{self.length} D = {self.bond:3}"

    @property
    def anneal(self) -> ar.Anneal:
        """What evolves."""
        return problem(cylinder(self.length, self.length), DURATION, seed=1)

    def chain(self, precision: str, symmetric: bool = True) -> Chain:
        """Return a chain of its own from the state."""
        tensors, dims, order = self.product.tensors, self.product.dims, self.product.order
        if not symmetric:
            tensors, dims = self.product.in_z_basis(), [(even + odd, 0) for even, odd in dims]
        own = Product([tensor.astype(DTYPES[precision]) for tensor in tensors], list(dims), symmetric, order)
        return Chain(own, self.anneal.instance, Limits(self.bond, TRUNCATION, KRYLOV[precision]))

    def seconds(
        self, precision: str, two_site: bool, symmetric: bool = True, clock: Callable[[], float] = time.thread_time
    ) -> float:
        """Return the time of a step."""
        chain, anneal = self.chain(precision, symmetric), self.anneal
        start = clock()
        step(chain, anneal, PLACE, two_site)
        return clock() - start


def grown(length: int, bonds: list[int]) -> list[Subject]:
    """Return states of ascending bond dimension; beyond 64 a step for every doubling."""
    anneal = problem(cylinder(length, length), DURATION, seed=1)
    instance = anneal.instance
    order = best_order(instance.coupling_matrix(), instance.lattice.coordinates)
    limits = Limits(min(64, bonds[0]), TRUNCATION, 1e-5)
    chain = Chain(plus_state(instance, order, True, np.complex64), instance, limits)
    for number in range(PLACE):
        step(chain, anneal, number, False)
    found = []
    for bond in bonds:
        while limits.bond_dimension < bond:
            limits.bond_dimension = min(2 * limits.bond_dimension, bond)
            step(chain, anneal, PLACE, False)
        found.append(Subject(length, bond, chain.product()))
    return found


def least(work: dict[Key, Callable[[], float]], repeats: int) -> dict[Key, float]:
    """Return the least time of each piece of work, taken in turn; kernels are loaded before."""
    best = dict.fromkeys(work, np.inf)
    for _ in range(repeats):
        for name, run in work.items():
            best[name] = min(best[name], run())
    return best


def mixed(two_site: float, one_site: float) -> float:
    return (two_site + (REFRESH - 1) * one_site) / REFRESH


def title(text: str) -> None:
    print(f"\n{text} (load {os.getloadavg()[0]:.1f})", flush=True)


def precision_table(subjects: list[Subject], repeats: int) -> None:
    title("Seconds a step on one thread: two-site, one-site, mixed; gain = double over single, two-site and one-site")
    for subject in subjects:
        work = {(p, two): partial(subject.seconds, p, two) for p in DTYPES for two in (True, False)}
        t = least(work, repeats)
        parts = [f"{p} {t[p, True]:8.4f} {t[p, False]:8.4f} {mixed(t[p, True], t[p, False]):8.4f}" for p in DTYPES]
        gains = [f"{t['double', two] / t['single', two]:.2f}" for two in (True, False)]
        print(subject, *parts, "gain", *gains, sep="   ", flush=True)


def symmetry_table(subjects: list[Subject], repeats: int) -> None:
    title("Without and with the spin-flip symmetry, double precision, seconds a step on one thread")
    for subject in subjects:
        kinds = [(two, symmetric) for two in (True, False) for symmetric in (False, True)]
        t = least({kind: partial(subject.seconds, "double", *kind) for kind in kinds}, repeats)
        parts = [
            f"{name} {t[two, False]:8.4f} -> {t[two, True]:8.4f}, gain {t[two, False] / t[two, True]:.2f}"
            for name, two in (("two-site", True), ("one-site", False))
        ]
        print(subject, *parts, sep="   ", flush=True)


def thread_table(subjects: list[Subject], repeats: int) -> None:
    title("Two threads against one, wall seconds of a mixed step")

    def wall(subject: Subject, precision: str, two_site: bool, threads: int) -> float:
        with blas_threads(threads):
            return subject.seconds(precision, two_site, clock=time.perf_counter)

    for subject in subjects:
        for precision in DTYPES:
            kinds = [(two, threads) for two in (True, False) for threads in (1, 2)]
            t = least({kind: partial(wall, subject, precision, *kind) for kind in kinds}, repeats)
            one, two = (mixed(t[True, threads], t[False, threads]) for threads in (1, 2))
            print(f"{subject} {precision}: {one:.3f} -> {two:.3f}, gain {one / two:.2f}", flush=True)


def peak(precision: str) -> float:
    """Return the best rate of square products through SciPy, in operations per second."""
    gemm, best = getattr(blas, GEMMS[precision]), 0.0
    for n in (128, 192, 256, 384):
        a = np.asfortranarray(np.random.default_rng(n).random((n, n)).astype(DTYPES[precision]))
        out = np.empty_like(a)
        for _ in range(20):
            start = time.thread_time()
            for _ in range(4):
                gemm(1.0, a, a, c=out, overwrite_c=1)
            best = max(best, 4 * 8.0 * n**3 / (time.thread_time() - start))
    return best


_CALL = ctypes.CFUNCTYPE(None, *[ctypes.c_void_p] * 13)
_kept, _count = [], [0.0, 0.0]


def count_products() -> None:
    """Give the kernels of this process, none of them loaded yet, a `gemm` that counts its seconds and operations."""

    def counting(gemm: Callable[..., None]) -> Callable[..., None]:
        def call(*arguments: int) -> None:
            m, n, k = (ctypes.c_int.from_address(place).value for place in arguments[2:5])
            start = time.thread_time()
            gemm(*arguments)
            _count[0] += time.thread_time() - start
            _count[1] += 8.0 * m * n * k

        return call

    for name in GEMMS.values():
        call = _CALL(counting(_CALL(get_cython_function_address("scipy.linalg.cython_blas", name))))
        _kept.append(call)
        binding.add_symbol(f"anneal_ref_{name}", ctypes.cast(call, ctypes.c_void_p).value)


def counted(subject: Subject, precision: str, two_site: bool) -> tuple[float, float]:
    """Return seconds and operations of the products of a step."""
    with blas_threads(1):
        chain = subject.chain(precision)
        _count[:] = 0.0, 0.0
        step(chain, subject.anneal, PLACE, two_site)
    return _count[0], _count[1]


def product_table(subjects: list[Subject], repeats: int) -> None:
    title("Matrix products on one thread: their share of the time of a step, and their rate over the peak")
    peaks = {precision: peak(precision) for precision in DTYPES}
    print(*(f"peak of {GEMMS[p]} {peaks[p] / 1e9:.0f} GF/s" for p in DTYPES), sep=", ")
    spawn = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(1, mp_context=spawn, initializer=count_products) as other:
        for subject in subjects:
            for precision in DTYPES:
                for name, two_site in (("two-site", True), ("one-site", False)):
                    spent, inside, operations = np.inf, np.inf, 0.0
                    for _ in range(repeats):
                        spent = min(spent, subject.seconds(precision, two_site))
                        seconds, operations = other.submit(counted, subject, precision, two_site).result()
                        inside = min(inside, seconds)
                    print(
                        f"{subject} {precision} {name}: {operations / 1e9:7.1f} GFLOP, share {inside / spent:4.0%}, "
                        f"rate {operations / inside / 1e9:5.1f} GF/s, {operations / inside / peaks[precision]:4.0%}",
                        flush=True,
                    )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    chosen = parser.add_mutually_exclusive_group()
    chosen.add_argument("--quick", action="store_true", help="5x5, small bonds (default)")
    chosen.add_argument("--full", action="store_true", help="5x5 and 6x6, bond dimensions up to 256")
    full = parser.parse_args().full
    print("kernels of the matrix products:", ", ".join(sorted({pool["architecture"] for pool in threadpool_info()})))
    with blas_threads(1):
        # compiled or loaded now, for every kind of tensor
        for precision in DTYPES:
            for symmetric in (True, False):
                for two_site in (True, False):
                    grown(3, [8])[0].seconds(precision, two_site, symmetric)
        bonds = [16, 32, 64, 128, 256] if full else [16, 32, 64]
        subjects = [subject for length in ((5, 6) if full else (5,)) for subject in grown(length, bonds)]
        wide = [subject for subject in subjects if subject.bond >= 128] if full else grown(5, [128])
        precision_table(subjects, 5 if full else 3)
        symmetry_table([subject for subject in subjects if subject.bond >= 32], 3)
        product_table(wide, 3 if full else 1)
        thread_table(wide, 5 if full else 2)


if __name__ == "__main__":
    main()
