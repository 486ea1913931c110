"""The work identity holds for a good evolution, and shows a bad one."""

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.exact.work import work_identity

S = np.linspace(0, 1, 41)
SCHEDULES = {
    "polynomial": ar.Schedule.polynomial([6, -12, 6], [0, 1, 2]),
    "table": ar.Schedule.from_table(S, 6 * (1 - S) ** 2, 3 * S**1.5),
    "broken line": ar.Schedule.from_table(S, 6 * (1 - S) ** 2, 3 * S**1.5, interpolation="linear"),
}


def anneal(schedule, fields=None, waveform=None):
    lattice = ar.lattices.square(2, 3)
    instance = ar.Instance(lattice, np.random.default_rng(8).normal(size=len(lattice.edges)), fields)
    return ar.Anneal(instance, schedule, 2.0, waveform=waveform)


@pytest.mark.parametrize("schedule", SCHEDULES.values(), ids=SCHEDULES.keys())
@pytest.mark.parametrize("fields", [None, [0.3, -0.2, 0.0, 0.9, 0.1, -0.6]], ids=["half", "whole"])
def test_a_good_evolution_obeys_the_identity(schedule, fields):
    # rows of a table closer than a panel limit the quadrature, not the evolution
    limit = {"polynomial": 1e-10, "table": 2e-7, "broken line": 5e-6}
    name = next(name for name, one in SCHEDULES.items() if one is schedule)
    assert abs(work_identity(ar.StateVector(tolerance=1e-10), anneal(schedule, fields))) < limit[name]


def test_pauses_and_corners_are_no_trouble():
    waveform = ar.Waveform([0, 0.3, 0.6, 1], [0, 0.4, 0.4, 1])
    case = anneal(SCHEDULES["polynomial"], waveform=waveform)
    assert abs(work_identity(ar.StateVector(tolerance=1e-10), case)) < 1e-7


def test_a_coarse_evolution_breaks_it():
    backend = ar.StateVector(steps=1, scheme="strang")
    case = ar.Anneal(anneal(SCHEDULES["polynomial"]).instance, ar.Schedule.polynomial([6, -12, 6], [0, 1, 2]), 20.0)
    coarse, fine = work_identity(backend, case), work_identity(backend.finer("step"), case)
    assert abs(coarse) > 1e-4
    assert abs(fine) < abs(coarse) / 2
