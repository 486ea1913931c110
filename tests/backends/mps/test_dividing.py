"""Two site tensors become one, and one becomes two again: against singular values by numpy."""

import numpy as np
import pytest

from anneal_ref.backends.mps import compiled
from anneal_ref.backends.mps.dividing import FEWEST

N = 7
KINDS = pytest.mark.parametrize("symmetric", [True, False], ids=["sectors", "dense"])
DTYPES = pytest.mark.parametrize("dtype", [np.complex128, np.complex64])


def numpy_pair(a, b, dims, symmetric):
    """Two site tensors as one matrix for every parity of the bond between them, or as one matrix altogether."""
    if symmetric:
        return [a[0, :, : dims[0]] @ b[0, : dims[0]], a[0, :, dims[0] :] @ b[0, dims[0] :]]
    return [np.einsum("slm,tmr->sltr", a, b).reshape(a.shape[1] * 2, -1)]


def pair(symmetric, dtype=np.complex128, spectrum=None, left=12, right=10, seed=0):
    """Site tensors around a bond with a given list of singular values in each sector."""
    generator = np.random.default_rng(seed)

    def orthonormal(rows, columns):
        return np.linalg.qr(generator.normal(size=(rows, columns)) + 1j * generator.normal(size=(rows, columns)))[0]

    spectrum = spectrum or ([[1.0, 0.4, 0.05, 0.01], [0.7, 0.2, 0.02]] if symmetric else [[1.0, 0.5, 0.3, 0.1, 1e-3]])
    parts = [(orthonormal(left if symmetric else 2 * left, len(s)), orthonormal(right if symmetric else 2 * right,
              len(s)).conj().T * np.array(s)[:, None]) for s in spectrum]  # fmt: skip
    dims = tuple(len(s) for s in spectrum) if symmetric else (len(spectrum[0]), 0)
    if symmetric:
        a, b = np.concatenate([u for u, _ in parts], 1)[None], np.concatenate([v for _, v in parts])[None]
    else:
        a = parts[0][0].reshape(2, left, -1)
        b = parts[0][1].reshape(-1, 2, right).swapaxes(0, 1)
    return np.ascontiguousarray(a, dtype), np.ascontiguousarray(b, dtype), dims


@DTYPES
@KINDS
def test_joined_and_divided_without_loss(symmetric, dtype):
    a, b, dims = pair(symmetric, dtype)
    theta = compiled.join(a, b, dims[0], symmetric)
    assert np.linalg.norm(theta) == pytest.approx(np.linalg.norm(b), rel=1e-6)
    after = compiled.divide(theta.copy(), 1 << 20, 0.0, symmetric)
    assert after[4] < np.finfo(dtype).eps ** 2 * 100
    scale = np.linalg.norm(b)
    for one, other in zip(
        numpy_pair(*after[:2], after[2:4], symmetric), numpy_pair(a, b, dims, symmetric), strict=True
    ):
        np.testing.assert_allclose(scale * one, other, atol=20 * np.finfo(dtype).eps)


@DTYPES
@KINDS
@pytest.mark.parametrize("most", [1, 2, 3, 4])
def test_the_smallest_singular_values_go_first(symmetric, dtype, most):
    a, b, dims = pair(symmetric, dtype)
    found = compiled.divide(compiled.join(a, b, dims[0], symmetric), most, 0.0, symmetric)
    values = np.concatenate([np.linalg.svd(m, compute_uv=False) for m in numpy_pair(a, b, dims, symmetric)])
    values = np.sort(values)[::-1]
    assert found[2] + found[3] == most
    assert found[4] == pytest.approx(np.sum(values[most:] ** 2) / np.sum(values**2), rel=1e-5)
    np.testing.assert_allclose(np.sort(found[5])[::-1], values[:most] / np.linalg.norm(values[:most]), rtol=1e-5)
    # the left tensor is an isometry and the right one carries norm 1
    flat = found[0].reshape(-1, most)
    if symmetric:
        k0 = found[2]
        for part in (found[0][0, :, :k0], found[0][0, :, k0:]):
            np.testing.assert_allclose(part.conj().T @ part, np.eye(part.shape[1]), atol=1e-5)
    else:
        np.testing.assert_allclose(flat.conj().T @ flat, np.eye(most), atol=1e-5)
    assert np.linalg.norm(found[1]) == pytest.approx(1.0, abs=1e-6)


@DTYPES
@KINDS
def test_tiny_discarded_weights_are_sums_in_double_precision(symmetric, dtype):
    # one minus the kept weight would be 1e-7 or 0 in single precision
    spectrum = [[1.0, 0.3, 2e-6], [0.5, 1e-6]] if symmetric else [[1.0, 0.5, 0.3, 2e-6, 1e-6]]
    a, b, dims = pair(symmetric, dtype, spectrum)
    found = compiled.divide(compiled.join(a, b, dims[0], symmetric), 3, 0.0, symmetric)
    assert found[4] == pytest.approx(5e-12 / 1.34, rel=0.3 if dtype is np.complex64 else 1e-6)


@KINDS
def test_truncation_is_relative_to_what_is_beyond_the_largest(symmetric):
    many = list(1e-2 * 0.8 ** np.arange(40))
    spectrum = [[1.0, *many[::2]], many[1::2]] if symmetric else [[1.0, *many]]
    a, b, dims = pair(symmetric, spectrum=spectrum, left=30, right=30)
    weights = np.sort(np.square(np.concatenate(spectrum)))
    for truncation in (1e-2, 1e-4, 1e-6):
        found = compiled.divide(compiled.join(a, b, dims[0], symmetric), 64, truncation, symmetric)
        dropped = np.cumsum(weights) <= truncation * weights[:-1].sum()
        assert found[2] + found[3] == max(FEWEST, 41 - dropped.sum())
        assert found[4] <= truncation * weights[:-1].sum() / weights.sum()


@KINDS
def test_a_site_becomes_an_isometry_and_a_bond(random_product, symmetric):
    for seed in range(4):
        product = random_product(N, 6, symmetric, seed=seed)
        for p in range(N - 1):
            a, b, dims = product.tensors[p], product.tensors[p + 1], product.dims[p + 1]
            q, bond, even, odd = compiled.orthogonalise(a, dims[0], symmetric)
            after = compiled.attach(bond, b, even, dims[0], symmetric)
            assert q.shape[2] == even + odd <= q.shape[0] * q.shape[1] * (2 if symmetric else 1)
            pairs = zip(numpy_pair(q, after, (even, odd), symmetric), numpy_pair(a, b, dims, symmetric), strict=True)
            for one, other in pairs:
                np.testing.assert_allclose(one, other, atol=1e-13)
            for part in (q[0, :, :even], q[0, :, even:]) if symmetric else (q.reshape(-1, even),):
                np.testing.assert_allclose(part.conj().T @ part, np.eye(part.shape[1]), atol=1e-13)
