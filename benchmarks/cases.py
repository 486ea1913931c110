"""The anneals that the benchmarks of matrix product states share, and their exact answers, kept in a file.

+-1 couplings, G = 5 (1 - s)^2, P = 5 s rad/ns, from |+...+>; cylinders are periodic around. Errors are against the
state vector at a tolerance of 1e-9 (1e-8 from 24 spins on): the correlation error eps = sqrt(sum (c - t)^2 / sum t^2)
over all pairs, of connected correlations where there are fields, and the largest absolute error of all <Z> and <Z Z>.
"""

from __future__ import annotations

import tempfile
import time
from collections.abc import Callable, Iterable
from functools import cache
from pathlib import Path
from typing import TypeVar

import numpy as np

import anneal_ref as ar

SCHEDULE = ar.Schedule.polynomial(transverse=[5, -10, 5], problem=[0, 5])
ANSWERS = Path(tempfile.gettempdir()) / "anneal_ref_exact"

Result = TypeVar("Result")


def cylinder(length: int, ring: int) -> ar.Lattice:
    return ar.lattices.square(length, ring, periodic=(False, True))


def problem(lattice: ar.Lattice, duration: float, seed: int, fields: float = 0.0) -> ar.Anneal:
    """Return an anneal; `fields` is the width of gaussian fields."""
    law = ar.disorder.gaussian(fields) if fields else None
    instance = ar.draw_instance(lattice, ar.disorder.plus_minus(), fields=law, seed=seed)
    return ar.Anneal(instance, SCHEDULE, duration)


@cache
def exact(anneal: ar.Anneal) -> np.ndarray:
    """Return <Z_i Z_j>, its diagonal replaced by <Z_i>."""
    file = ANSWERS / f"{anneal.identity}.npy"
    if not file.exists():
        tolerance = 1e-9 if anneal.n_sites < 24 else 1e-8
        answer = packed(ar.StateVector(tolerance=tolerance).evolve(anneal).moments())
        ANSWERS.mkdir(exist_ok=True)
        np.save(file, answer)
    return np.load(file)


def packed(moments: ar.Moments) -> np.ndarray:
    values = moments.zz.value.copy()
    np.fill_diagonal(values, moments.z.value)
    return values


def squares(found: np.ndarray, truth: np.ndarray) -> tuple[float, float]:
    """Return sum (c - t)^2 and sum t^2 over all pairs, of connected correlations."""
    pairs = np.triu_indices(len(truth), 1)
    c, t = ((values - np.outer(values.diagonal(), values.diagonal()))[pairs] for values in (found, truth))
    return float(((c - t) ** 2).sum()), float((t**2).sum())


def errors(results: Iterable[tuple[np.ndarray, np.ndarray]]) -> tuple[float, float]:
    """Return the correlation error, pooled as a ratio of sums, and the largest absolute error of (found, truth)."""
    results = list(results)
    parts = np.sum([squares(found, truth) for found, truth in results], axis=0)
    return float(np.sqrt(parts[0] / parts[1])), max(float(np.abs(found - truth).max()) for found, truth in results)


def timed(work: Callable[[], Result]) -> tuple[float, Result]:
    """Return the CPU time of this thread and the result."""
    start = time.thread_time()
    result = work()
    return time.thread_time() - start, result


def solved(backend: ar.MPS, anneal: ar.Anneal) -> tuple[float, np.ndarray, ar.MPSState]:
    """Return the seconds of an evolution with its correlations, the correlations and the state."""
    # the order of the sites is searched once for a lattice
    backend.plan(anneal)

    def work() -> tuple[np.ndarray, ar.MPSState]:
        state = backend.evolve(anneal)
        return packed(state.moments()), state

    seconds, (values, state) = timed(work)
    return seconds, values, state
