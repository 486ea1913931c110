"""The work identity holds for a good evolution, and shows a bad one or a wrong Hamiltonian."""

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.backends.mps.work import Work

S = np.linspace(0, 1, 41)
SCHEDULES = {
    "polynomial": ar.Schedule.polynomial([6, -12, 6], [0, 1, 2]),
    "table": ar.Schedule.from_table(S, 6 * (1 - S) ** 2, 3 * S**1.5),
    "broken line": ar.Schedule.from_table(S, 6 * (1 - S) ** 2, 3 * S**1.5, interpolation="linear"),
}
LIMITS = {"polynomial": 1e-7, "table": 1e-7, "broken line": 1e-5}
FIELDS = [0.3, -0.2, 0.0, 0.9, 0.1, -0.6]


def anneal(schedule="polynomial", fields=None, waveform=None):
    lattice = ar.lattices.square(2, 3)
    instance = ar.Instance(lattice, np.random.default_rng(8).normal(size=len(lattice.edges)), fields)
    return ar.Anneal(instance, SCHEDULES[schedule], 2.0, waveform=waveform)


def residual(case, halvings, **options):
    state = ar.MPS(halvings=halvings, truncation=1e-15).evolve(case, **options)
    return abs(state.ledger["work_identity"])


@pytest.mark.parametrize("schedule", SCHEDULES)
@pytest.mark.parametrize("fields", [None, FIELDS], ids=["sectors", "dense"])
def test_it_falls_with_the_step(schedule, fields):
    case = anneal(schedule, fields)
    coarse, fine = residual(case, 1), residual(case, 4)
    assert fine < LIMITS[schedule]
    assert fine < coarse / 10


def test_pauses_and_corners_are_no_trouble():
    case = anneal(waveform=ar.Waveform([0, 0.3, 0.6, 1], [0, 0.4, 0.4, 1]))
    assert residual(case, 4) < 1e-6


@pytest.mark.parametrize("kicks", [[(0.5, 1)], [(0.0, 2), (0.3, 1), (0.3, 4), (1.0, 0)]])
def test_a_kick_is_not_counted_as_an_error(kicks):
    assert residual(anneal(fields=FIELDS), 4, kicks=kicks) < 1e-6


def test_truncation_breaks_it():
    case = anneal()
    states = [ar.MPS(bond_dimension=bond, halvings=3).evolve(case) for bond in (2, 8)]
    rough, good = (abs(state.ledger["work_identity"]) for state in states)
    assert rough > 100 * good


class TestByHand:
    """Energies of an evolution that is known: one spin that follows the field of a slow schedule by definition."""

    # any f(t), g(t) with G f' + P g' = 0; here G = 1 - t and P = t, f = t^2 / 2, g' = -(1 - t)
    case = ar.Anneal(
        ar.Instance(ar.lattices.from_edges(1, []), [], [1.0]), ar.Schedule.linear((1.0, 0.0), (0.0, 1.0)), 1.0
    )

    def work(self, times, g_scale=1.0):
        work = Work(self.case)
        for t in times:
            work.note(t, (t**2 / 2, g_scale * (t**2 / 2 - t)))
        return work

    def test_zero(self):
        assert self.work(np.linspace(0, 1, 7)).residual() == pytest.approx(0.0, abs=1e-14)

    def test_uneven_times(self):
        assert self.work([0, 0.1, 0.5, 0.55, 1]).residual() == pytest.approx(0.0, abs=1e-14)

    def test_what_is_left(self):
        # the integral of t (1 - t) is 1/6: once in one part, and minus twice that in the other
        assert self.work(np.linspace(0, 1, 7), 2.0).residual() == pytest.approx(-1 / 6, abs=1e-14)

    def test_pieces_on_both_sides_of_a_kick_add_up(self):
        work = self.work([0, 0.2, 0.4, 0.5], 2.0)
        for t in (0.5, 0.7, 0.8, 1.0):
            work.note(t, (t**2 / 2 + 7.0, 2 * (t**2 / 2 - t) - 3.0))
        assert work.residual() == pytest.approx(-1 / 6, abs=1e-14)

    def test_few_times_say_nothing(self):
        assert Work(self.case).residual() == 0.0
        assert self.work([0.0, 1.0]).residual() == 0.0


def energies(state, instance):
    """The two parts of the energy of a state under some instance."""
    moments = state.moments()
    pairs = np.sum(np.triu(instance.coupling_matrix(), 1) * moments.zz.value)
    return float(-instance.transverse @ moments.x.value), float(pairs + instance.fields @ moments.z.value)


@pytest.mark.parametrize("wrong", ["none", "sign of the couplings", "fields forgotten", "weights", "another schedule"])
def test_the_wrong_hamiltonian_leaves_much(wrong):
    """Energies of one evolution under the instance or the schedule of another: all but the first must fail."""
    right = anneal(fields=FIELDS)
    case = right.instance
    twin = {
        "sign of the couplings": ar.Instance(case.lattice, -case.couplings, case.fields),
        "fields forgotten": ar.Instance(case.lattice, case.couplings),
        "weights": ar.Instance(case.lattice, case.couplings, case.fields, np.full(6, 1.1)),
    }.get(wrong, case)
    schedule = ar.Schedule.polynomial([6, -6], [0, 1, 2]) if wrong == "another schedule" else right.schedule
    work = Work(ar.Anneal(twin, schedule, 2.0))
    for state in ar.MPS(halvings=1, truncation=1e-15).states(right, np.linspace(0, 1, 25)):
        work.note(2 * state.at, energies(state, twin))
    assert (abs(work.residual()) < 1e-3) == (wrong == "none")
    assert wrong == "none" or abs(work.residual()) > 0.1
