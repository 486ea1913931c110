"""A small vector vocabulary for numba: values that are whole machine vectors, and tuples of them.

Every name below is lowered straight to LLVM vector instructions, so the code that runs does not depend on what an
automatic vectoriser recognises. The width follows the processor (64 bytes with AVX-512, else 32); on narrower machines
LLVM splits the vectors, so the same source runs everywhere. A *bundle* is a tuple of 2, 4, 8 or 16 vectors whose index
bits are amplitude bits: `turn` rotates along such a bit, `lanes` along the bits inside a vector.
"""

# Lowering functions have the shape numba prescribes; their arguments are LLVM builders and values.
from __future__ import annotations

from typing import Any

from llvmlite import binding, ir
from numba import types
from numba.core import config
from numba.extending import intrinsic, models, register_model

INT32 = ir.IntType(32)


def _vector_bytes() -> int:
    features = config.CPU_FEATURES
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
class _VectorModel(models.PrimitiveModel):  # type: ignore[misc]
    def __init__(self, manager: Any, kind: Any) -> None:
        super().__init__(manager, kind, kind.ir)


VECTORS = {types.float64: Vector(types.float64), types.float32: Vector(types.float32)}


# ------------------------------------------------------------------------------------------------ pieces of lowering
def _pointer(context: Any, builder: Any, kind: Any, array: Any, index: Any) -> Any:
    return builder.gep(context.make_array(kind)(context, builder, array).data, [index])


def _load(context: Any, builder: Any, kind: Any, array: Any, index: Any) -> Any:
    vector = VECTORS[kind.dtype].ir
    pointer = builder.bitcast(_pointer(context, builder, kind, array, index), vector.as_pointer())
    return builder.load(pointer, align=kind.dtype.bitwidth // 8)


def _store(context: Any, builder: Any, kind: Any, array: Any, index: Any, value: Any) -> None:
    pointer = builder.bitcast(_pointer(context, builder, kind, array, index), value.type.as_pointer())
    builder.store(value, pointer, align=kind.dtype.bitwidth // 8)


def _call(builder: Any, name: str, values: list[Any]) -> Any:
    kind = values[0].type
    width = 64 if isinstance(kind.element, ir.DoubleType) else 32
    name = f"llvm.{name}.v{kind.count}f{width}"
    function = builder.module.globals.get(name)
    if function is None:
        function = ir.Function(builder.module, ir.FunctionType(kind, [kind] * len(values)), name)
    return builder.call(function, values)


def _fma(builder: Any, a: Any, b: Any, c: Any) -> Any:
    return _call(builder, "fma", [a, b, c])


def _shuffle(builder: Any, value: Any, order: list[int]) -> Any:
    mask = ir.Constant(ir.VectorType(INT32, len(order)), order)
    return builder.shuffle_vector(value, ir.Constant(value.type, ir.Undefined), mask)


def _splat(builder: Any, scalar: Any, kind: ir.VectorType) -> Any:
    one = builder.insert_element(ir.Constant(kind, ir.Undefined), scalar, ir.Constant(INT32, 0))
    return _shuffle(builder, one, [0] * kind.count)


def _unpack(builder: Any, bundle: Any, count: int) -> list[Any]:
    return [builder.extract_value(bundle, k) for k in range(count)]


def _pack(context: Any, builder: Any, kind: Any, values: list[Any]) -> Any:
    return context.make_tuple(builder, kind, values)


def _turn(builder: Any, values: list[Any], tangent: Any, bit: int) -> None:
    """Rotate in place: a' = a - t b, b' = b + t a for every pair along an index bit."""
    minus = builder.fneg(tangent)
    for k in range(len(values)):
        if not k >> bit & 1:
            a, b = values[k], values[k | 1 << bit]
            values[k], values[k | 1 << bit] = _fma(builder, minus, b, a), _fma(builder, tangent, a, b)


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
        return _load(context, builder, sig.args[0], args[0], args[1])

    return VECTORS[x.dtype](x, types.intp), codegen


@intrinsic
def vstore(typingctx: Any, x: Any, i: Any, v: Any) -> Any:
    """vstore(x, i, v): x[i : i + lanes] = v."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        _store(context, builder, sig.args[0], args[0], args[1], args[2])
        return context.get_dummy_value()

    return types.void(x, types.intp, v), codegen


@intrinsic
def vfill(typingctx: Any, x: Any, i: Any) -> Any:
    """vfill(x, i): x[i] in every lane."""
    vector = VECTORS[x.dtype]

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return _splat(builder, builder.load(_pointer(context, builder, sig.args[0], args[0], args[1])), vector.ir)

    return vector(x, types.intp), codegen


@intrinsic
def vset(typingctx: Any, c: Any) -> Any:
    """vset(c): the scalar c in every lane."""
    vector = VECTORS[c]

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return _splat(builder, args[0], vector.ir)

    return vector(c), codegen


@intrinsic
def vfma(typingctx: Any, a: Any, b: Any, c: Any) -> Any:
    """vfma(a, b, c): a * b + c, rounded once."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return _fma(builder, *args)

    return a(a, b, c), codegen


@intrinsic
def vfloor(typingctx: Any, a: Any) -> Any:
    """vfloor(a): largest integer not above a, lane by lane."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return _call(builder, "floor", list(args))

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
        return _shuffle(builder, args[0], list(range(sig.args[0].lanes))[::-1])

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
                _shuffle(builder, value, list(range(count))), _shuffle(builder, value, list(range(count, 2 * count)))
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
        pointer = builder.bitcast(_pointer(context, builder, sig.args[0], args[0], args[1]), byte)
        kind = ir.FunctionType(ir.VoidType(), [byte, INT32, INT32, INT32])
        function = builder.module.declare_intrinsic("llvm.prefetch", [byte], kind)
        builder.call(function, [pointer, ir.Constant(INT32, 0), ir.Constant(INT32, 3), ir.Constant(INT32, 1)])
        return context.get_dummy_value()

    return types.void(x, types.intp), codegen


# ------------------------------------------------------------------------------------------------ bundles
@intrinsic(prefer_literal=True)
def gather(typingctx: Any, x: Any, i: Any, step: Any, count: Any) -> Any:
    """gather(x, i, step, count): the bundle of vectors at i, i + step, ... (count is a literal)."""
    bundle = types.UniTuple(VECTORS[x.dtype], count.literal_value)

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        values, index = [], args[1]
        for _ in range(bundle.count):
            values.append(_load(context, builder, sig.args[0], args[0], index))
            index = builder.add(index, args[2])
        return _pack(context, builder, bundle, values)

    return bundle(x, types.intp, types.intp, count), codegen


@intrinsic
def scatter(typingctx: Any, x: Any, i: Any, step: Any, bundle: Any) -> Any:
    """scatter(x, i, step, bundle): the opposite of gather."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        index = args[1]
        for value in _unpack(builder, args[3], sig.args[3].count):
            _store(context, builder, sig.args[0], args[0], index, value)
            index = builder.add(index, args[2])
        return context.get_dummy_value()

    return types.void(x, types.intp, types.intp, bundle), codegen


@intrinsic(prefer_literal=True)
def turn(typingctx: Any, bundle: Any, x: Any, i: Any, bits: Any) -> Any:
    """turn(bundle, x, i, bits): rotate along index bits 0 .. bits-1 with tangents x[i], x[i+1], ..."""
    count = bits.literal_value

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        values = _unpack(builder, args[0], bundle.count)
        for bit in range(count):
            index = builder.add(args[2], ir.Constant(args[2].type, bit))
            scalar = builder.load(_pointer(context, builder, sig.args[1], args[1], index))
            _turn(builder, values, _splat(builder, scalar, bundle.dtype.ir), bit)
        return _pack(context, builder, bundle, values)

    return bundle(bundle, x, types.intp, bits), codegen


@intrinsic
def turn_lanes(typingctx: Any, bundle: Any, x: Any, i: Any) -> Any:
    """turn_lanes(bundle, x, i): rotate along all lane bits; x[i:] holds a vector of +-tangents for each lane bit."""
    lanes = bundle.dtype.lanes

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        values = _unpack(builder, args[0], bundle.count)
        for bit in range(lanes.bit_length() - 1):
            index = builder.add(args[2], ir.Constant(args[2].type, bit * lanes))
            signed = _load(context, builder, sig.args[1], args[1], index)
            order = [lane ^ 1 << bit for lane in range(lanes)]
            values = [_fma(builder, signed, _shuffle(builder, value, order), value) for value in values]
        return _pack(context, builder, bundle, values)

    return bundle(bundle, x, types.intp), codegen


@intrinsic
def flip(typingctx: Any, bundle: Any) -> Any:
    """flip(bundle): the vectors in reverse order, each with its lanes in reverse order."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        values = _unpack(builder, args[0], bundle.count)[::-1]
        order = list(range(bundle.dtype.lanes))[::-1]
        return _pack(context, builder, bundle, [_shuffle(builder, value, order) for value in values])

    return bundle(bundle), codegen


@intrinsic
def turn_pair(typingctx: Any, a: Any, b: Any, signed: Any) -> Any:
    """turn_pair(a, b, signed): rotate bundle a against bundle b, the sign alternating with the parity of the index."""
    both = types.UniTuple(a, 2)

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        x, y = _unpack(builder, args[0], a.count), _unpack(builder, args[1], a.count)
        for k in range(a.count):
            plus = builder.fneg(args[2]) if k.bit_count() & 1 else args[2]
            minus = args[2] if k.bit_count() & 1 else builder.fneg(args[2])
            x[k], y[k] = _fma(builder, plus, y[k], x[k]), _fma(builder, minus, x[k], y[k])
        return _pack(context, builder, both, [_pack(context, builder, a, x), _pack(context, builder, a, y)])

    return both(a, b, signed), codegen


def _product(builder: Any, a: Any, b: Any, c: Any, d: Any) -> tuple[Any, Any]:
    """Real and imaginary part of (a + i b)(c + i d)."""
    real = _fma(builder, a, c, builder.fneg(builder.fmul(b, d)))
    return real, _fma(builder, a, d, builder.fmul(b, c))


@intrinsic
def times(typingctx: Any, re: Any, im: Any, t: Any, i: Any, d: Any, j: Any, r: Any, k: Any) -> Any:
    """times(re, im, t, i, d, j, r, k): multiply block by block by t[i:] * d[j:] * (r[k] + i r[k+1]).

    t and d hold blocks (a vector of real parts, then one of imaginary parts).
    """
    both = types.UniTuple(re, 2)
    lanes = re.dtype.lanes

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        def block(at: int, offset: int) -> Any:
            index = builder.add(args[at + 1], ir.Constant(args[at + 1].type, offset))
            return _load(context, builder, sig.args[at], args[at], index)

        def scalar(offset: int) -> Any:
            index = builder.add(args[7], ir.Constant(args[7].type, offset))
            return _splat(builder, builder.load(_pointer(context, builder, sig.args[6], args[6], index)), re.dtype.ir)

        x, y = _unpack(builder, args[0], re.count), _unpack(builder, args[1], re.count)
        rr, ri = scalar(0), scalar(1)
        for n in range(re.count):
            first, second = 2 * lanes * n, 2 * lanes * n + lanes
            a, b = _product(builder, block(2, first), block(2, second), block(4, first), block(4, second))
            a, b = _product(builder, a, b, rr, ri)
            x[n], y[n] = _product(builder, x[n], y[n], a, b)
        return _pack(context, builder, both, [_pack(context, builder, re, x), _pack(context, builder, re, y)])

    return both(re, im, t, types.intp, d, types.intp, r, types.intp), codegen


# ------------------------------------------------------------------------------------------------ sums for read-outs
@intrinsic
def squares(typingctx: Any, x: Any, i: Any, p: Any, j: Any) -> Any:
    """squares(x, i, p, j): p[j : j + lanes] = re^2 + im^2 of the block at i, in double precision."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        lanes = VECTORS[sig.args[0].dtype].lanes
        wide = ir.VectorType(ir.DoubleType(), lanes)
        re = _load(context, builder, sig.args[0], args[0], args[1])
        index = builder.add(args[1], ir.Constant(args[1].type, lanes))
        im = _load(context, builder, sig.args[0], args[0], index)
        if sig.args[0].dtype == types.float32:
            re, im = builder.fpext(re, wide), builder.fpext(im, wide)
        _store(context, builder, sig.args[2], args[2], args[3], _fma(builder, re, re, builder.fmul(im, im)))
        return context.get_dummy_value()

    return types.void(x, types.intp, p, types.intp), codegen


@intrinsic
def vplace(typingctx: Any, c: Any, z: Any, x: Any, i: Any, sign: Any) -> Any:
    """vplace(c, z, x, i, sign): a vector of x at i = sign * c[z:], rounded from double precision."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        vector = VECTORS[sig.args[2].dtype].ir
        wide = ir.VectorType(ir.DoubleType(), vector.count)
        pointer = builder.bitcast(_pointer(context, builder, sig.args[0], args[0], args[1]), wide.as_pointer())
        value = builder.fmul(builder.load(pointer, align=8), _splat(builder, args[4], wide))
        if vector != wide:
            value = builder.fptrunc(value, vector)
        _store(context, builder, sig.args[2], args[2], args[3], value)
        return context.get_dummy_value()

    return types.void(c, types.intp, x, types.intp, types.float64), codegen


@intrinsic
def fold(typingctx: Any, bundle: Any) -> Any:
    """fold(bundle): the sum of the vectors, then for every index bit the sum with its sign (bit 0 counts +)."""
    bits = bundle.count.bit_length() - 1
    result = types.UniTuple(bundle.dtype, bits + 1)

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        values, signed = _unpack(builder, args[0], bundle.count), []
        for _ in range(bits):
            even, odd = values[::2], values[1::2]
            signed.append(_total(builder, [builder.fsub(a, b) for a, b in zip(even, odd, strict=True)]))
            values = [builder.fadd(a, b) for a, b in zip(even, odd, strict=True)]
        return _pack(context, builder, result, [values[0], *signed])

    return result(bundle), codegen


def _total(builder: Any, values: list[Any]) -> Any:
    while len(values) > 1:
        values = [builder.fadd(a, b) for a, b in zip(values[::2], values[1::2], strict=True)]
    return values[0]


@intrinsic
def add_currents(typingctx: Any, re: Any, im: Any, sums: Any) -> Any:
    """add_currents(re, im, sums): for every index bit add the sum over pairs of re im' - im re' (bit 0 unprimed)."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        x, y = _unpack(builder, args[0], re.count), _unpack(builder, args[1], re.count)
        totals = _unpack(builder, args[2], sums.count)
        for bit in range(sums.count):
            for k in range(re.count):
                if not k >> bit & 1:
                    other = k | 1 << bit
                    totals[bit] = _fma(builder, x[k], y[other], totals[bit])
                    totals[bit] = _fma(builder, builder.fneg(y[k]), x[other], totals[bit])
        return _pack(context, builder, sums, totals)

    return sums(re, im, sums), codegen


@intrinsic
def lane_currents(typingctx: Any, re: Any, im: Any, x: Any, i: Any) -> Any:
    """lane_currents(re, im, x, i): add re im' - im re' to x[i:], a vector for each lane bit (bit 1: minus that)."""
    lanes = re.lanes

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        for bit in range(lanes.bit_length() - 1):
            index = builder.add(args[3], ir.Constant(args[3].type, bit * lanes))
            order = [lane ^ 1 << bit for lane in range(lanes)]
            total = _load(context, builder, sig.args[2], args[2], index)
            total = _fma(builder, args[0], _shuffle(builder, args[1], order), total)
            total = _fma(builder, builder.fneg(args[1]), _shuffle(builder, args[0], order), total)
            _store(context, builder, sig.args[2], args[2], index, total)
        return context.get_dummy_value()

    return types.void(re, im, x, types.intp), codegen
