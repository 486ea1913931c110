"""All Pfaffians of leading blocks in one elimination, also where some of them vanish."""

import numpy as np
import pytest

from anneal_ref.backends.fermions.covariance import Covariance


def pfaffian(matrix):
    """Slow twin: one matrix at a time, complete pivoting."""
    value = 1.0
    while len(matrix):
        i, j = np.unravel_index(np.abs(matrix).argmax(), matrix.shape)
        if matrix[i, j] == 0:
            return 0.0
        rest = [k for k in range(len(matrix)) if k not in (i, j)]
        value *= matrix[i, j] * (-1) ** (i + j - (i < j))
        x, y = matrix[i, rest], matrix[j, rest]
        matrix = matrix[np.ix_(rest, rest)] - (np.outer(x, y) - np.outer(y, x)) / matrix[i, j]
    return value


def plain_elimination(matrix):
    """Wrong twin: leading Pfaffians without any care for small pivots."""
    matrix, value, found = matrix.copy(), 1.0, []
    with np.errstate(all="ignore"):
        while len(matrix):
            value *= matrix[0, 1]
            found.append(value)
            x, y = matrix[0, 2:], matrix[1, 2:]
            matrix = matrix[2:, 2:] - (np.outer(x, y) - np.outer(y, x)) / matrix[0, 1]
    return np.array(found)


def turns(kind, n, random):
    """Orthogonal matrices, most of them such that Pfaffians vanish or nearly do."""
    rows = 2 * n
    if kind == "any":
        return np.linalg.qr(random.normal(size=(rows, rows)))[0]
    if kind == "near a product":
        return np.linalg.qr(np.eye(rows) + 1e-3 * random.normal(size=(rows, rows)))[0]
    if kind == "permuted":
        return np.eye(rows)[random.permutation(rows)]
    if kind == "nearly permuted":
        return np.linalg.qr(np.eye(rows)[random.permutation(rows)] + 1e-7 * random.normal(size=(rows, rows)))[0]
    turn = np.roll(np.eye(rows), 1, axis=0)
    for _ in range(3 * n):
        i, j = random.choice(rows, 2, replace=False)
        angle = random.choice([1e-9, 1e-6, np.pi / 4, np.pi / 2, np.pi / 2 + 1e-8])
        turn[[i, j]] = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]]) @ turn[[i, j]]
    return turn


KINDS = ("any", "near a product", "permuted", "nearly permuted", "special angles")


def worst(kind, gaussian_band, find):
    random, largest = np.random.default_rng(7), 0.0
    for n in (2, 3, 5, 9, 14):
        band, gamma = gaussian_band(turns(kind, n, random))
        found = find(band, gamma, n)
        for i in range(n - 1):
            for r in range(1, n - i):
                block = gamma[2 * i + 1 : 2 * (i + r) + 1, 2 * i + 1 : 2 * (i + r) + 1]
                error = abs(found[i, r - 1] - pfaffian(block))
                largest = max(largest, error if np.isfinite(error) else np.inf)
    return largest


def by_kernel(band, gamma, n):
    return Covariance(band, False, False).correlations(np.arange(n)[::-1].copy(), n - 1)


def by_plain_elimination(band, gamma, n):
    found = np.zeros((n, n - 1))
    for i in range(n - 1):
        found[i, : n - 1 - i] = plain_elimination(gamma[2 * i + 1 : -1, 2 * i + 1 : -1])
    return found


@pytest.mark.parametrize("kind", KINDS)
def test_every_leading_pfaffian_is_that_of_its_own_elimination(kind, gaussian_band):
    assert worst(kind, gaussian_band, by_kernel) < 1e-12


@pytest.mark.parametrize("kind", ["permuted", "special angles"])
def test_an_elimination_without_care_fails(kind, gaussian_band):
    assert worst(kind, gaussian_band, by_plain_elimination) > 1e-6


def test_the_square_is_the_determinant(gaussian_band):
    _, gamma = gaussian_band(turns("any", 6, np.random.default_rng(1)))
    assert pfaffian(gamma[1:9, 1:9]) ** 2 == pytest.approx(np.linalg.det(gamma[1:9, 1:9]), rel=1e-10)
