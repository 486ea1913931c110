import os
import subprocess
import sys
from functools import cache

import numpy as np
import pytest
from scipy.stats import binom

from anneal_ref.backends.exact import layout, phases
from anneal_ref.backends.exact.compiled import run
from anneal_ref.backends.exact.register import Register
from anneal_ref.base.errors import AnnealRefError, InputError

# Largest error of an amplitude in units of 2^(-N/2), after half a dozen layers.
DOUBLE, SINGLE = 2e-13, 5e-6


def all_spins(n):
    return 1 - 2 * ((np.arange(1 << n)[:, None] >> np.arange(n)) & 1)


class Dense:
    """Slow twin: the same layers in plain numpy on the whole space, sharing nothing with the kernels."""

    def __init__(self, couplings, fields, weights, sign=1):
        self.n, self.weights = len(fields), weights
        s = all_spins(self.n)
        self.energy = sign * ((s @ np.triu(couplings, 1)) * s).sum(axis=1) + s @ fields
        self.psi = np.full(1 << self.n, 2.0 ** (-self.n / 2), complex)

    def layers(self, problem, transverse):
        for phi, theta in zip(problem, transverse, strict=True):
            self.psi = self.psi * np.exp(-1j * phi * self.energy)
            for i in range(self.n):
                a, angle = self.psi.reshape(-1, 2, 1 << i), theta * self.weights[i]
                self.psi = (np.cos(angle) * a + 1j * np.sin(angle) * a[:, ::-1]).reshape(-1)

    def kick(self, site):
        self.psi = self.psi * all_spins(self.n)[:, site]

    def moments(self):
        p, s = np.abs(self.psi) ** 2, all_spins(self.n)
        halves = (self.psi.reshape(-1, 2, 1 << i) for i in range(self.n))
        return p @ s, s.T @ (s * p[:, None]), np.array([2 * np.vdot(a[:, 0], a[:, 1]).real for a in halves])


def problem(n, symmetric, seed=0):
    rng = np.random.default_rng([seed, n, symmetric])
    upper = np.triu(rng.normal(size=(n, n)), 1)
    fields = np.zeros(n) if symmetric else rng.normal(size=n)
    return upper + upper.T, fields, rng.uniform(-1.5, 1.5, size=n)


def angles(n, count=5, large=False):
    rng = np.random.default_rng([7, n])
    transverse = rng.normal(size=count) * (50 if large else 0.4)
    if large:
        transverse[:3] = np.pi / 2, 1e3, -np.pi
    return rng.normal(size=count) * 0.3, transverse


def assert_same(register, dense, tolerance):
    scale = 2.0 ** (register.n_sites / 2)
    assert np.abs(register.amplitudes() - dense.psi).max() * scale < tolerance
    assert abs(register.norm() - 1) < tolerance
    for ours, theirs in zip(register.moments(), dense.moments(), strict=True):
        np.testing.assert_allclose(ours, theirs, atol=tolerance)


def history(system, n, large):
    """Layers, kicks, layers; a register gets them in calls of several lengths."""
    problem_angles, transverse_angles = angles(n, 6, large)
    system.layers(problem_angles[:1], transverse_angles[:1])
    system.layers(problem_angles[1:3], transverse_angles[1:3])
    system.kick(n // 2)
    system.kick(n - 1)
    system.layers(problem_angles[3:], transverse_angles[3:])
    return system


@cache
def twin(n, symmetric, large):
    return history(Dense(*problem(n, symmetric)), n, large)


@pytest.mark.parametrize("precision", ["double", "single"])
@pytest.mark.parametrize("symmetric", [False, True])
@pytest.mark.parametrize("n", range(1, 16))
def test_layers_equal_the_dense_twin(n, symmetric, precision):
    large = n % 2 == 0
    register = history(Register(*problem(n, symmetric), symmetric, precision), n, large)
    assert_same(register, twin(n, symmetric, large), DOUBLE if precision == "double" else SINGLE)


def forced():
    for precision in ("double", "single"):
        least = layout.smallest(precision)
        for n in (12, 13, 15):
            for low in range(least, n - 3):
                for piece in (least, None):
                    yield n, low, piece, precision


@pytest.mark.parametrize("symmetric", [False, True])
@pytest.mark.parametrize(("n", "low", "piece", "precision"), list(forced()))
def test_any_cut_into_tiles_gives_the_same(n, low, piece, precision, symmetric):
    register = Register(*problem(n, symmetric), symmetric, precision, low_bits=low, piece_bits=piece)
    large = low % 2 == 0
    history(register, n, large)
    assert_same(register, twin(n, symmetric, large), DOUBLE if precision == "double" else SINGLE)


@pytest.mark.slow
@pytest.mark.parametrize("symmetric", [False, True])
@pytest.mark.parametrize("n", [17, 19, 20])
def test_large_states_with_the_measured_tiles(n, symmetric):
    register = history(Register(*problem(n, symmetric), symmetric), n, False)
    assert_same(register, twin(n, symmetric, False), 5 * DOUBLE)


@pytest.mark.parametrize("symmetric", [False, True])
@pytest.mark.parametrize("fault", ["sign of J", "weight", "field"])
def test_a_wrong_twin_is_noticed(fault, symmetric):
    n = 10
    couplings, fields, weights = problem(n, symmetric)
    wrong = {
        "sign of J": lambda: Dense(couplings, fields, weights, sign=-1),
        "weight": lambda: Dense(couplings, fields, weights * np.where(np.arange(n) == n - 1, 1.001, 1)),
        "field": lambda: Dense(couplings, fields + 1e-3 * (np.arange(n) == 3), weights),
    }[fault]()
    register = Register(couplings, fields, weights, symmetric)
    history(register, n, False)
    assert_same(register, twin(n, symmetric, False), DOUBLE)
    history(wrong, n, False)
    with pytest.raises(AssertionError):
        assert_same(register, wrong, SINGLE)


def test_right_angles_are_exact_flips_and_large_angles_do_not_overflow():
    n = 12
    couplings, fields, _ = problem(n, False)
    register = Register(couplings, fields, np.ones(n), precision="single")
    register.layers([0.4] * 400, [np.pi / 2] * 400)
    assert abs(register.norm() - 1) < 1e-4
    register = Register(couplings, fields, np.ones(n))
    register.layers([0.0], [np.pi / 2])
    np.testing.assert_allclose(register.amplitudes(), 1j**n * 2.0 ** (-n / 2), atol=1e-15)


def test_single_precision_error_grows_slowly():
    n, count = 12, 500
    single, double = (Register(*problem(n, True), True, precision) for precision in ("single", "double"))
    for register in (single, double):
        register.layers([0.05] * count, [0.07] * count)
    assert np.abs(single.moments()[1] - double.moments()[1]).max() < 1e-4
    assert abs(single.norm() - 1) < 1e-4
    assert abs(double.norm() - 1) < 1e-12


@pytest.mark.parametrize("symmetric", [False, True])
@pytest.mark.parametrize("low", [None, 8])
def test_threads_do_not_change_a_bit(symmetric, low):
    n = 15
    results = []
    for threads in (1, 2, 3):
        register = Register(*problem(n, symmetric), symmetric, threads=threads, low_bits=low)
        register.layers(*angles(n))
        results.append((register.amplitudes(), *register.moments(), register.sample(100, 5), register.norm()))
    for other in results[1:]:
        for ours, theirs in zip(results[0], other, strict=True):
            np.testing.assert_array_equal(ours, theirs)


@pytest.mark.parametrize("precision", ["double", "single"])
@pytest.mark.parametrize(("n", "symmetric"), [(3, False), (8, True), (11, True), (11, False)])
def test_samples_follow_the_probabilities(n, symmetric, precision):
    register = Register(*problem(n, symmetric), symmetric, precision, low_bits=7 if n == 11 else None)
    register.layers([0.3, 0.4], [0.6, 2.5])
    shots = 20000
    spins = register.sample(shots, 11)
    assert spins.dtype == np.int8
    assert spins.shape == (shots, n)
    np.testing.assert_array_equal(spins, register.sample(shots, 11))
    assert (spins != register.sample(shots, 12)).any()
    z, zz, _ = register.moments()
    upper = np.triu_indices(n, 1)
    chances = np.concatenate([(1 + z) / 2, (1 + zz[upper]) / 2, register.probabilities()[:8]])
    s = spins.astype(int)
    index = ((1 - s) // 2) @ (1 << np.arange(n))
    counts = [(s > 0).sum(0), ((s.T @ s)[upper] + shots) // 2, np.bincount(index, minlength=1 << n)[:8]]
    low, high = binom.interval(1 - 1e-4 / len(chances), shots, np.clip(chances, 0, 1))
    counts = np.concatenate(counts)
    assert (counts >= low).all()
    assert (counts <= high).all()


@pytest.mark.parametrize("symmetric", [False, True])
@pytest.mark.parametrize("low", [None, 7])
def test_amplitudes_and_log_probabilities_of_configurations(symmetric, low):
    n = 11
    register = Register(*problem(n, symmetric), symmetric, low_bits=low)
    register.layers(*angles(n, large=True), kick=3)
    dense = Dense(*problem(n, symmetric))
    dense.layers(*angles(n, large=True))
    dense.kick(3)
    assert_same(register, dense, DOUBLE)
    spins = all_spins(n)
    np.testing.assert_allclose(register.amplitude_of(spins), register.amplitudes(), atol=1e-14)
    np.testing.assert_allclose(np.exp(register.log_probability(spins)), register.probabilities(), atol=1e-14)
    assert register.amplitude_of(np.empty((0, n), int)).shape == (0,)


def test_a_configuration_that_cannot_occur_has_log_probability_minus_infinity():
    register = Register(np.zeros((2, 2)), np.zeros(2), np.ones(2))
    register.load([1, 0, 0, 0])
    np.testing.assert_array_equal(register.log_probability([[1, 1], [-1, 1]]), [0.0, -np.inf])
    assert (register.sample(50, 1) == 1).all()


@pytest.mark.parametrize("parity", [1, -1])
@pytest.mark.parametrize("n", [4, 9, 12])
def test_load_then_layers(n, parity):
    rng = np.random.default_rng(n)
    psi = rng.normal(size=1 << n) + 1j * rng.normal(size=1 << n)
    psi += parity * psi[::-1]
    psi /= np.linalg.norm(psi)
    register, dense = Register(*problem(n, True), True), Dense(*problem(n, True))
    register.kick(0)
    register.layers([0.1], [9.0])
    register.load(psi)
    dense.psi = psi
    np.testing.assert_allclose(register.amplitudes(), psi, atol=1e-15)
    assert_same(history(register, n, True), history(dense, n, True), 10 * DOUBLE)
    register.load_plus()
    np.testing.assert_allclose(register.amplitudes(), 2.0 ** (-n / 2), atol=1e-15)


def test_progress_counts_every_layer(monkeypatch):
    monkeypatch.setattr("anneal_ref.backends.exact.register.CALL_AMPLITUDES", 1 << 12)
    done = []
    register = Register(*problem(10, False))
    register.layers(np.full(30, 0.1), np.full(30, 0.1), progress=done.append)
    assert sum(done) == 30
    assert len(done) > 1


@pytest.mark.parametrize("threads", [1, 2])
def test_a_run_cut_into_short_calls_changes_nothing(monkeypatch, threads):
    """Ctrl-C is heard between calls: a large layer takes several, and every thread comes back to the same layer."""
    n = 14
    whole, cut = (Register(*problem(n, True), True, low_bits=8, threads=k) for k in (1, threads))
    whole.layers(*angles(n))
    calls = []

    def counted(*arguments):
        calls.append(run(*arguments))
        return calls[-1]

    monkeypatch.setattr("anneal_ref.backends.exact.register.CALL_AMPLITUDES", 1 << 10)
    monkeypatch.setattr("anneal_ref.backends.exact.register.run", counted)
    cut.layers(*angles(n))
    assert len(calls) > 20
    np.testing.assert_array_equal(whole.amplitudes(), cut.amplitudes())


def test_an_interrupted_layer_makes_the_register_unusable_until_reloaded(monkeypatch):
    register = Register(*problem(12, False), low_bits=8)
    register.layers([0.1], [0.1])

    def interrupt(*args):
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr("anneal_ref.backends.exact.register.run", interrupt)
        with pytest.raises(KeyboardInterrupt):
            register.layers([0.1], [0.1])
    with pytest.raises(AnnealRefError, match="interrupted"):
        register.moments()
    register.load_plus()
    assert register.norm() == pytest.approx(1, abs=1e-14)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (([[0, 1], [2, 0]], [0, 0], [1, 1]), "symmetric"),
        (([[1, 0], [0, 0]], [0, 0], [1, 1]), "zero diagonal"),
        (([[0, np.nan], [0, 0]], [0, 0], [1, 1]), "finite"),
        (([[0, 1, 2]], [0, 0], [1, 1]), "square"),
        (([[0, 1], [1, 0]], [0], [1, 1]), "fields"),
        (([[0, 1], [1, 0]], [0, 0], [1, np.inf]), "weights"),
        (([[0, 1], [1, 0]], [0, 1], [1, 1], True), "zero fields"),
        (([[0, 1], [1, 0]], [0, 0], [1, 1], False, "half"), "precision"),
        (([[0, 1], [1, 0]], [0, 0], [1, 1], False, "double", 0), "threads"),
    ],
)
def test_bad_problems_are_refused(arguments, message):
    with pytest.raises(InputError, match=message):
        Register(*arguments)


def test_bad_calls_are_refused_and_change_nothing():
    register = Register(*problem(9, True), True)
    for call, message in (
        (lambda: register.layers([0.1, np.nan], [0.1, 0.1]), "finite"),
        (lambda: register.layers([0.1], [0.1, 0.2]), "shape"),
        (lambda: register.kick(9), "site"),
        (lambda: register.sample(-1, 0), "shots"),
        (lambda: register.load(np.ones(4)), "psi"),
        (lambda: register.load(np.arange(512.0)), "even or odd"),
        (lambda: register.amplitude_of(np.zeros((1, 9))), "spins"),
    ):
        with pytest.raises(InputError, match=message):
            call()
    np.testing.assert_array_equal(register.amplitudes(), np.full(512, 2.0**-4.5))


@pytest.mark.parametrize(
    ("n", "symmetric", "precision"), [(30, True, "double"), (30, False, "single"), (24, True, "single")]
)
def test_memory_is_near_the_state(n, symmetric, precision):
    state = (16 if precision == "double" else 8) << (n - symmetric)
    assert state < Register.bytes_needed(n, symmetric, precision) < 1.05 * state + 50e6


def test_sines_and_cosines_of_the_phase_tables():
    rng = np.random.default_rng(3)
    energies = np.concatenate(
        [rng.normal(size=500) * 10.0 ** rng.integers(-8, 5, size=500), [0, np.pi / 2, -np.pi, 1e6]]
    )
    energies = np.ascontiguousarray(np.pad(energies, (0, -len(energies) % 16)))
    c, s = np.empty_like(energies), np.empty_like(energies)
    phases.unit_phases(1.0, energies, np.intp(0), len(energies), c, s)
    np.testing.assert_allclose(c, np.cos(energies), atol=3e-16)
    np.testing.assert_allclose(s, -np.sin(energies), atol=3e-16)


NARROW = """
import numpy as np
from anneal_ref.backends.exact.register import Register
from anneal_ref.backends.exact.compiled import run
from anneal_ref.backends.exact.simd import VECTOR_BYTES
assert VECTOR_BYTES == 32
n = 12
upper = np.triu(np.random.default_rng(0).normal(size=(n, n)), 1)
for low in (None, 7):
    register = Register(upper + upper.T, np.zeros(n), np.ones(n), True, low_bits=low)
    register.layers([0.3, 0.2], [0.4, 2.5])
    print(*register.moments()[1][0], *register.moments()[2])
"""


@pytest.mark.slow
def test_machines_with_short_vectors_get_the_same_numbers(tmp_path):
    environment = os.environ | {"NUMBA_CPU_NAME": "generic", "NUMBA_CPU_FEATURES": "", "NUMBA_CACHE_DIR": str(tmp_path)}
    printed = subprocess.run(
        [sys.executable, "-c", NARROW], env=environment, capture_output=True, text=True, check=True, timeout=300
    ).stdout
    n = 12
    upper = np.triu(np.random.default_rng(0).normal(size=(n, n)), 1)
    dense = Dense(upper + upper.T, np.zeros(n), np.ones(n))
    dense.layers([0.3, 0.2], [0.4, 2.5])
    _, zz, x = dense.moments()
    for line in printed.splitlines():
        np.testing.assert_allclose(np.array(line.split(), float), [*zz[0], *x], atol=1e-13)
