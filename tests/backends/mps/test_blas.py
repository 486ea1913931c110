"""Matrix products inside compiled code, on views, against numpy."""

import numpy as np
import pytest
from numba import njit

from anneal_ref.backends.mps.blas import ADJOINT, PLAIN, TRANSPOSED, multiply


@njit
def _product(out, first, second, first_op, second_op, alpha, beta):
    # strided, so that one compilation serves all shapes
    multiply(out[:, ::1], first[:, ::1], second[:, ::1], first_op, second_op, alpha, beta)


@pytest.mark.parametrize("dtype", [np.complex128, pytest.param(np.complex64, marks=pytest.mark.slow)])
@pytest.mark.parametrize(("first_op", "second_op"), [(PLAIN, PLAIN), (PLAIN, TRANSPOSED), (ADJOINT, PLAIN)])
def test_products_of_views(dtype, first_op, second_op):
    generator = np.random.default_rng(5)
    does = {PLAIN: lambda m: m, TRANSPOSED: np.transpose, ADJOINT: lambda m: m.conj().T}
    for m, n, k in ((3, 4, 5), (1, 6, 2), (4, 1, 1), (0, 3, 2), (3, 0, 2), (3, 4, 0)):
        shapes = [(m, n), (m, k) if first_op == PLAIN else (k, m), (k, n) if second_op == PLAIN else (n, k)]
        wide = [generator.normal(size=(a + 3, b + 4, 2)) @ [1, 1j] for a, b in shapes]
        wide = [w.astype(dtype) for w in wide]
        out, first, second = (w[1 : 1 + a, 2 : 2 + b] for w, (a, b) in zip(wide, shapes, strict=True))
        for alpha, beta in ((1.0, 0.0), (-1.0, 1.0), (0.5, 2.0)):
            before, around = out.copy(), wide[0].copy()
            _product(out, first, second, first_op, second_op, alpha, beta)
            expected = alpha * does[first_op](first) @ does[second_op](second) + beta * before
            np.testing.assert_allclose(out, expected, atol=1e-5 if dtype is np.complex64 else 1e-13)
            around[1 : 1 + m, 2 : 2 + n] = out
            np.testing.assert_array_equal(wide[0], around)
