"""A small vector vocabulary for numba: values that are whole machine vectors, and tuples of them.

Every name below is lowered straight to LLVM vector instructions, so the code that runs does not depend on what an
automatic vectoriser recognises. The width follows the processor (64 bytes with AVX-512, else 32); on narrower machines
LLVM splits the vectors, so the same source runs everywhere. Lowering functions have the shape numba prescribes; their
arguments are LLVM builders and values.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from llvmlite import binding, ir
from numba import types
from numba.core import config
from numba.extending import intrinsic as typed_intrinsic
from numba.extending import models, register_model

intrinsic: Callable[..., Any] = typed_intrinsic
literal_intrinsic: Callable[..., Any] = typed_intrinsic(prefer_literal=True)
"""The decorators, loosely typed: the names they make exist in compiled code only."""
INT32 = ir.IntType(32)


def _vector_bytes() -> int:
    features = getattr(config, "CPU_FEATURES", None)
    if features is None:
        return 64 if binding.get_host_cpu_features().get("avx512f", False) else 32
    return 64 if "+avx512f" in features else 32


VECTOR_BYTES = _vector_bytes()
"""Bytes of a vector on this machine."""


class Vector(types.Type):
    """Numba type of one machine vector of `lanes` floats of type `base`."""

    def __init__(self, base: Any) -> None:
        self.base, self.lanes = base, VECTOR_BYTES * 8 // base.bitwidth
        super().__init__(name=f"vector({base},{self.lanes})")

    @property
    def ir(self) -> ir.VectorType:
        """The LLVM type."""
        return ir.VectorType(ir.DoubleType() if self.base == types.float64 else ir.FloatType(), self.lanes)


@register_model(Vector)
class _VectorModel(models.PrimitiveModel):
    def __init__(self, manager: Any, kind: Any) -> None:
        super().__init__(manager, kind, kind.ir)  # type: ignore[no-untyped-call]


VECTORS = {types.float64: Vector(types.float64), types.float32: Vector(types.float32)}


# ------------------------------------------------------------------------------------------------ pieces of lowering
def pointer_to(context: Any, builder: Any, kind: Any, array: Any, index: Any) -> Any:
    """Address of array[index]."""
    return builder.gep(context.make_array(kind)(context, builder, array).data, [index])


def emit_load(context: Any, builder: Any, kind: Any, array: Any, index: Any) -> Any:
    """Load a vector at array[index]."""
    vector = VECTORS[kind.dtype].ir
    pointer = builder.bitcast(pointer_to(context, builder, kind, array, index), vector.as_pointer())
    return builder.load(pointer, align=kind.dtype.bitwidth // 8)


def emit_store(context: Any, builder: Any, kind: Any, array: Any, index: Any, value: Any) -> None:
    """Store a vector at array[index]."""
    pointer = builder.bitcast(pointer_to(context, builder, kind, array, index), value.type.as_pointer())
    builder.store(value, pointer, align=kind.dtype.bitwidth // 8)


def emit_call(builder: Any, name: str, values: list[Any]) -> Any:
    """Call the LLVM intrinsic `name` on vectors."""
    kind = values[0].type
    width = 64 if isinstance(kind.element, ir.DoubleType) else 32
    name = f"llvm.{name}.v{kind.count}f{width}"
    function = builder.module.globals.get(name)
    if function is None:
        function = ir.Function(builder.module, ir.FunctionType(kind, [kind] * len(values)), name)
    return builder.call(function, values)


def emit_fma(builder: Any, a: Any, b: Any, c: Any) -> Any:
    """Multiply and add: a * b + c."""
    return emit_call(builder, "fma", [a, b, c])


def emit_shuffle(builder: Any, value: Any, order: list[int]) -> Any:
    """Rearrange lanes."""
    mask = ir.Constant(ir.VectorType(INT32, len(order)), order)
    return builder.shuffle_vector(value, ir.Constant(value.type, ir.Undefined), mask)


def emit_splat(builder: Any, scalar: Any, kind: ir.VectorType) -> Any:
    """Put a scalar in every lane."""
    one = builder.insert_element(ir.Constant(kind, ir.Undefined), scalar, ir.Constant(INT32, 0))
    return emit_shuffle(builder, one, [0] * kind.count)


# ------------------------------------------------------------------------------------------------ single vectors
@intrinsic
def lanes_of(typingctx: Any, x: Any) -> Any:
    """lanes_of(x): number of lanes of a vector of the floats in array x (a constant)."""
    count = VECTORS[x.dtype].lanes

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return ir.Constant(ir.IntType(64), count)

    return types.intp(x), codegen


@intrinsic
def vload(typingctx: Any, x: Any, i: Any) -> Any:
    """vload(x, i): the vector x[i : i + lanes] of a contiguous array (no bounds check)."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return emit_load(context, builder, sig.args[0], args[0], args[1])

    return VECTORS[x.dtype](x, types.intp), codegen


@intrinsic
def vstore(typingctx: Any, x: Any, i: Any, v: Any) -> Any:
    """vstore(x, i, v): x[i : i + lanes] = v."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        emit_store(context, builder, sig.args[0], args[0], args[1], args[2])
        return context.get_dummy_value()

    return types.void(x, types.intp, v), codegen


@intrinsic
def vfill(typingctx: Any, x: Any, i: Any) -> Any:
    """vfill(x, i): x[i] in every lane."""
    vector = VECTORS[x.dtype]

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return emit_splat(builder, builder.load(pointer_to(context, builder, sig.args[0], args[0], args[1])), vector.ir)

    return vector(x, types.intp), codegen


@intrinsic
def vset(typingctx: Any, c: Any) -> Any:
    """vset(c): the scalar c in every lane."""
    vector = VECTORS[c]

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return emit_splat(builder, args[0], vector.ir)

    return vector(c), codegen


@intrinsic
def vfma(typingctx: Any, a: Any, b: Any, c: Any) -> Any:
    """vfma(a, b, c): a * b + c, rounded once."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return emit_fma(builder, *args)

    return a(a, b, c), codegen


@intrinsic
def vfloor(typingctx: Any, a: Any) -> Any:
    """vfloor(a): largest integer not above a, lane by lane."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return emit_call(builder, "floor", list(args))

    return a(a), codegen


@intrinsic
def vneg(typingctx: Any, a: Any) -> Any:
    """vneg(a): -a."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.fneg(args[0])

    return a(a), codegen


def _binary(operation: str) -> Any:
    @intrinsic
    def f(typingctx: Any, a: Any, b: Any) -> Any:
        def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
            return getattr(builder, operation)(args[0], args[1])

        return a(a, b), codegen

    return f


vadd, vsub, vmul = _binary("fadd"), _binary("fsub"), _binary("fmul")


@intrinsic
def vflip(typingctx: Any, a: Any) -> Any:
    """vflip(a): the lanes in reverse order."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return emit_shuffle(builder, args[0], list(range(sig.args[0].lanes))[::-1])

    return a(a), codegen


@intrinsic
def vsum(typingctx: Any, a: Any) -> Any:
    """vsum(a): the sum of the lanes in double precision, in a fixed order (halves added to halves)."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        value, count = args[0], sig.args[0].lanes
        if sig.args[0].base == types.float32:
            value = builder.fpext(value, ir.VectorType(ir.DoubleType(), count))
        while count > 1:
            count //= 2
            value = builder.fadd(
                emit_shuffle(builder, value, list(range(count))),
                emit_shuffle(builder, value, list(range(count, 2 * count))),
            )
        return builder.extract_element(value, ir.Constant(INT32, 0))

    return types.float64(a), codegen


@intrinsic
def parity(typingctx: Any, i: Any) -> Any:
    """parity(i): number of set bits modulo 2."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.and_(builder.ctpop(args[0]), ir.Constant(args[0].type, 1))

    return i(i), codegen


@intrinsic
def prefetch(typingctx: Any, x: Any, i: Any) -> Any:
    """prefetch(x, i): ask for the cache line of x[i]; never faults."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        byte = ir.IntType(8).as_pointer()
        pointer = builder.bitcast(pointer_to(context, builder, sig.args[0], args[0], args[1]), byte)
        kind = ir.FunctionType(ir.VoidType(), [byte, INT32, INT32, INT32])
        function = builder.module.declare_intrinsic("llvm.prefetch", [byte], kind)
        builder.call(function, [pointer, ir.Constant(INT32, 0), ir.Constant(INT32, 3), ir.Constant(INT32, 1)])
        return context.get_dummy_value()

    return types.void(x, types.intp), codegen


@intrinsic
def vplace(typingctx: Any, c: Any, z: Any, x: Any, i: Any, sign: Any) -> Any:
    """vplace(c, z, x, i, sign): a vector of x at i = sign * c[z:], rounded from double precision."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        vector = VECTORS[sig.args[2].dtype].ir
        wide = ir.VectorType(ir.DoubleType(), vector.count)
        pointer = builder.bitcast(pointer_to(context, builder, sig.args[0], args[0], args[1]), wide.as_pointer())
        value = builder.fmul(builder.load(pointer, align=8), emit_splat(builder, args[4], wide))
        if vector != wide:
            value = builder.fptrunc(value, vector)
        emit_store(context, builder, sig.args[2], args[2], args[3], value)
        return context.get_dummy_value()

    return types.void(c, types.intp, x, types.intp, types.float64), codegen


@intrinsic
def squares(typingctx: Any, x: Any, i: Any, p: Any, j: Any) -> Any:
    """squares(x, i, p, j): p[j : j + lanes] = re^2 + im^2 of the block at i, in double precision."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        lanes = VECTORS[sig.args[0].dtype].lanes
        wide = ir.VectorType(ir.DoubleType(), lanes)
        re = emit_load(context, builder, sig.args[0], args[0], args[1])
        index = builder.add(args[1], ir.Constant(args[1].type, lanes))
        im = emit_load(context, builder, sig.args[0], args[0], index)
        if sig.args[0].dtype == types.float32:
            re, im = builder.fpext(re, wide), builder.fpext(im, wide)
        emit_store(context, builder, sig.args[2], args[2], args[3], emit_fma(builder, re, re, builder.fmul(im, im)))
        return context.get_dummy_value()

    return types.void(x, types.intp, p, types.intp), codegen


@intrinsic
def lane_currents(typingctx: Any, re: Any, im: Any, x: Any, i: Any) -> Any:
    """lane_currents(re, im, x, i): add re im' - im re' to x[i:], a vector for each lane bit (bit 1: minus that)."""
    lanes = re.lanes

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        for bit in range(lanes.bit_length() - 1):
            index = builder.add(args[3], ir.Constant(args[3].type, bit * lanes))
            order = [lane ^ 1 << bit for lane in range(lanes)]
            total = emit_load(context, builder, sig.args[2], args[2], index)
            total = emit_fma(builder, args[0], emit_shuffle(builder, args[1], order), total)
            total = emit_fma(builder, builder.fneg(args[1]), emit_shuffle(builder, args[0], order), total)
            emit_store(context, builder, sig.args[2], args[2], index, total)
        return context.get_dummy_value()

    return types.void(re, im, x, types.intp), codegen


# ------------------------------------------------------------------------------------------------ between threads
@intrinsic
def add_shared(typingctx: Any, x: Any, i: Any, n: Any) -> Any:
    """add_shared(x, i, n): x[i] += n as one step for all threads; returns the value before."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.atomic_rmw(
            "add", pointer_to(context, builder, sig.args[0], args[0], args[1]), args[2], "seq_cst"
        )

    return types.int64(x, types.intp, types.int64), codegen


@intrinsic
def read_shared(typingctx: Any, x: Any, i: Any) -> Any:
    """read_shared(x, i): x[i] as other threads left it, and all they wrote before."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.load_atomic(pointer_to(context, builder, sig.args[0], args[0], args[1]), "acquire", 8)

    return types.int64(x, types.intp), codegen
