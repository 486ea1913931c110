"""Matrix products inside compiled kernels: BLAS on strided views, without copies.

Numba's own `np.dot` wants contiguous arrays and gives a new one. The kernels of this room multiply blocks of larger
arrays and add up in place, so they call the `gemm` of SciPy's BLAS. Its address is registered with LLVM under a name,
by which cached code finds it again in every process.
"""

from __future__ import annotations

from typing import Any

from llvmlite import binding, ir
from numba import njit, types
from numba.core import cgutils
from numba.extending import get_cython_function_address, intrinsic

_SYMBOLS = {types.complex128: "anneal_ref_zgemm", types.complex64: "anneal_ref_cgemm"}
_FORTRAN = {types.complex128: "zgemm", types.complex64: "cgemm"}
for _dtype, _name in _SYMBOLS.items():
    binding.add_symbol(_name, get_cython_function_address("scipy.linalg.cython_blas", _FORTRAN[_dtype]))

PLAIN, TRANSPOSED, ADJOINT = (ord(letter) for letter in "NTC")
"""What is done to a factor before it is multiplied."""


@intrinsic
def _gemm(  # type: ignore[no-untyped-def]
    typing_context, first_op, second_op, m, n, k, alpha, first, first_stride, second, second_stride, beta, out, stride
):
    """Call Fortran `gemm`; integers are passed by address, arrays by their data."""
    dtype = out.dtype
    if first.dtype != dtype or second.dtype != dtype:
        return None
    i32 = types.int32
    signature = types.void(
        types.uint8, types.uint8, i32, i32, i32, dtype, first, i32, second, i32, dtype, out, i32
    )  # fmt: skip

    def generate(context: Any, builder: Any, signature: Any, values: Any) -> Any:
        pointers = []
        for kind, value in zip(signature.args, values, strict=True):
            if isinstance(kind, types.Array):
                data = context.make_array(kind)(context, builder, value).data
            else:
                data = cgutils.alloca_once_value(builder, value)  # type: ignore[no-untyped-call]
            pointers.append(builder.bitcast(data, ir.IntType(8).as_pointer()))
        kind = ir.FunctionType(ir.VoidType(), [pointer.type for pointer in pointers])
        function = cgutils.get_or_insert_function(builder.module, kind, _SYMBOLS[dtype])  # type: ignore[no-untyped-call]
        builder.call(function, pointers)
        return context.get_dummy_value()

    return signature, generate


@njit(inline="never")
def multiply(out, first, second, first_op=PLAIN, second_op=PLAIN, alpha=1.0, beta=0.0):  # type: ignore[no-untyped-def]
    """Set out = alpha op(first) op(second) + beta out, for matrices whose rows are contiguous; they may be empty."""
    m, n = out.shape
    k = first.shape[1] if first_op == PLAIN else first.shape[0]
    if m == 0 or n == 0:
        return
    if k == 0:
        if beta == 0.0:
            out[:] = 0
        return
    item = out.itemsize
    one = out.dtype.type(1)
    # a row-major matrix is the transpose of a Fortran one, and so is the product
    _gemm(  # type: ignore[call-arg]
        types.uint8(second_op), types.uint8(first_op), types.int32(n), types.int32(m), types.int32(k),
        one * alpha, second, types.int32(max(second.strides[0] // item, second.shape[1])),
        first, types.int32(max(first.strides[0] // item, first.shape[1])),
        one * beta, out, types.int32(max(out.strides[0] // item, n)),
    )  # fmt: skip
