"""Light cones: the windowed evolution is that of the whole matrix."""

import numpy as np
import pytest

from anneal_ref.backends.fermions import cones as room
from anneal_ref.backends.fermions.cones import EDGE, Cones


def whole(n, ring, problem, transverse, couplings, weights, sign=-1.0):
    """Slow twin: M as a dense matrix; `sign` is that of c_2N against c_0."""
    matrix = np.eye(2 * n)

    def turn(k, angle):
        m, s = (k + 1) % (2 * n), sign if k + 1 == 2 * n else 1.0
        matrix[[k, m]] = (
            np.array([[np.cos(angle), s * np.sin(angle)], [-s * np.sin(angle), np.cos(angle)]]) @ (matrix[[k, m]])
        )

    for phi, theta in zip(problem, transverse, strict=True):
        for i in range(n if ring else n - 1):
            turn(2 * i + 1, 2 * phi * couplings[i])
        for i in range(n):
            turn(2 * i, -2 * theta * weights[i])
    return matrix


def angles(n, layers, size, seed=0):
    random = np.random.default_rng(seed)
    couplings, weights = random.normal(size=n), random.uniform(0.5, 1.5, n)
    return size * random.uniform(size=layers), size * random.uniform(size=layers), couplings, weights


@pytest.mark.parametrize("ring", [False, True], ids=["open", "ring"])
@pytest.mark.parametrize("n", [1, 3, 8, 21, 60])
@pytest.mark.parametrize(("layers", "size"), [(3, 1.0), (40, 0.1), (300, 0.2)])
def test_windows_give_the_whole_matrix(n, ring, layers, size):
    if ring and n < 3:
        return
    case = angles(n, layers, size)
    cones = Cones(n, ring, 0)
    cones.layers(*case)
    matrix = whole(n, ring, *case)
    np.testing.assert_allclose(cones.matrix(), matrix, atol=layers * 2e-15 + layers * EDGE)
    np.testing.assert_allclose(cones.norms(), 1.0, atol=1e-12)
    assert cones.edge <= EDGE
    pairs = np.kron(np.eye(n), [[0.0, 1.0], [-1.0, 0.0]])
    gamma = matrix @ pairs @ matrix.T
    band = cones.pairs(2 * n - 1 if not ring else n)
    for k in range(2 * n):
        for d in range(1, band.shape[1]):
            m, sign = (k + d) % (2 * n), 1.0 if k + d < 2 * n else -1.0 if ring else 0.0
            assert band[k, d] == pytest.approx(sign * gamma[k, m], abs=1e-12)


def test_a_ring_with_the_wrong_sign_is_seen():
    case = angles(8, 100, 0.2)
    cones = Cones(8, True, 0)
    cones.layers(*case)
    assert np.abs(cones.matrix() - whole(8, True, *case, sign=1.0)).max() > 0.1


def test_windows_follow_the_light_cone():
    n = 200
    problem, transverse = np.full(100, 0.05), np.full(100, 0.05)
    cones = Cones(n, False, 0)
    widths = []
    for _ in range(4):
        cones.layers(problem, transverse, np.ones(n), np.ones(n))
        widths.append(cones.widest)
    assert widths == sorted(widths)
    assert widths[-1] < 2 * n
    # the front goes over 4 min(theta, phi) operators a layer to either side
    assert np.diff(widths)[-1] == pytest.approx(2 * 100 * 4 * 0.05, rel=0.3)


def test_a_chain_that_is_cut_keeps_its_windows_within_the_pieces():
    n, couplings = 100, np.ones(100)
    couplings[4::5] = 0.0
    cones = Cones(n, False, 0)
    cones.layers(np.full(200, 0.1), np.full(200, 0.1), couplings, np.ones(n))
    # pieces of 10 operators that a bundle touches, and rows that stay empty
    assert cones.widest <= room.COLUMNS + 2 * 10 + 8
    for k, row in enumerate(cones.matrix()):
        assert set(np.flatnonzero(row) // 10) <= {k // 10}


@pytest.mark.parametrize("ring", [False, True], ids=["open", "ring"])
def test_room_threads_and_calls_change_no_bit(ring):
    n = 50
    case = angles(n, 200, 0.1)
    plain, other = Cones(n, ring, 0), Cones(n, ring, 500, threads=2)
    plain.layers(*case)
    problem, transverse, couplings, weights = case
    for part in (slice(0, 77), slice(77, 200)):
        other.layers(problem[part], transverse[part], couplings, weights)
    np.testing.assert_array_equal(plain.matrix(), other.matrix())


def test_a_missing_factor_two_is_seen(monkeypatch):
    case = angles(8, 100, 0.2)
    turns = room._turns
    monkeypatch.setattr(room, "_turns", lambda given, strengths: turns(given / 2, strengths))
    cones = Cones(8, False, 0)
    cones.layers(*case)
    assert np.abs(cones.matrix() - whole(8, False, *case)).max() > 0.1
