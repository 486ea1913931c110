"""Bundles: tuples of 2, 4, 8 or 16 vectors whose index bits are amplitude bits.

`gather` loads one, `turn` rotates along its index bits, `turn_lanes` along the bits inside a vector, `times` multiplies
it by phases, `scatter` stores it; `fold` and `add_currents` are the sums that read-outs need.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from llvmlite import ir
from numba import types

from anneal_ref.backends.exact.simd import (
    VECTORS,
    emit_fma,
    emit_load,
    emit_shuffle,
    emit_splat,
    emit_store,
    intrinsic,
    literal_intrinsic,
    pointer_to,
)

bundle_of: Callable[..., Any] = types.UniTuple


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
            values[k], values[k | 1 << bit] = emit_fma(builder, minus, b, a), emit_fma(builder, tangent, a, b)


@literal_intrinsic
def gather(typingctx: Any, x: Any, i: Any, step: Any, count: Any) -> Any:
    """gather(x, i, step, count): the bundle of vectors at i, i + step, ... (count is a literal)."""
    bundle = bundle_of(VECTORS[x.dtype], count.literal_value)

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        values, index = [], args[1]
        for _ in range(bundle.count):
            values.append(emit_load(context, builder, sig.args[0], args[0], index))
            index = builder.add(index, args[2])
        return _pack(context, builder, bundle, values)

    return bundle(x, types.intp, types.intp, count), codegen


@intrinsic
def scatter(typingctx: Any, x: Any, i: Any, step: Any, bundle: Any) -> Any:
    """scatter(x, i, step, bundle): the opposite of gather."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        index = args[1]
        for value in _unpack(builder, args[3], sig.args[3].count):
            emit_store(context, builder, sig.args[0], args[0], index, value)
            index = builder.add(index, args[2])
        return context.get_dummy_value()

    return types.void(x, types.intp, types.intp, bundle), codegen


@literal_intrinsic
def turn(typingctx: Any, bundle: Any, x: Any, i: Any, bits: Any) -> Any:
    """turn(bundle, x, i, bits): rotate along index bits 0 .. bits-1 with tangents x[i], x[i+1], ..."""
    count = bits.literal_value

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        values = _unpack(builder, args[0], bundle.count)
        for bit in range(count):
            index = builder.add(args[2], ir.Constant(args[2].type, bit))
            scalar = builder.load(pointer_to(context, builder, sig.args[1], args[1], index))
            _turn(builder, values, emit_splat(builder, scalar, bundle.dtype.ir), bit)
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
            signed = emit_load(context, builder, sig.args[1], args[1], index)
            order = [lane ^ 1 << bit for lane in range(lanes)]
            values = [emit_fma(builder, signed, emit_shuffle(builder, value, order), value) for value in values]
        return _pack(context, builder, bundle, values)

    return bundle(bundle, x, types.intp), codegen


@intrinsic
def flip(typingctx: Any, bundle: Any) -> Any:
    """flip(bundle): the vectors in reverse order, each with its lanes in reverse order."""

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        values = _unpack(builder, args[0], bundle.count)[::-1]
        order = list(range(bundle.dtype.lanes))[::-1]
        return _pack(context, builder, bundle, [emit_shuffle(builder, value, order) for value in values])

    return bundle(bundle), codegen


@intrinsic
def turn_pair(typingctx: Any, a: Any, b: Any, signed: Any) -> Any:
    """turn_pair(a, b, signed): rotate bundle a against bundle b, the sign alternating with the parity of the index."""
    both = bundle_of(a, 2)

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        x, y = _unpack(builder, args[0], a.count), _unpack(builder, args[1], a.count)
        for k in range(a.count):
            plus = builder.fneg(args[2]) if k.bit_count() & 1 else args[2]
            minus = args[2] if k.bit_count() & 1 else builder.fneg(args[2])
            x[k], y[k] = emit_fma(builder, plus, y[k], x[k]), emit_fma(builder, minus, x[k], y[k])
        return _pack(context, builder, both, [_pack(context, builder, a, x), _pack(context, builder, a, y)])

    return both(a, b, signed), codegen


def _product(builder: Any, a: Any, b: Any, c: Any, d: Any) -> tuple[Any, Any]:
    """Real and imaginary part of (a + i b)(c + i d)."""
    real = emit_fma(builder, a, c, builder.fneg(builder.fmul(b, d)))
    return real, emit_fma(builder, a, d, builder.fmul(b, c))


@intrinsic
def times(typingctx: Any, re: Any, im: Any, t: Any, i: Any, d: Any, j: Any, r: Any, k: Any) -> Any:
    """times(re, im, t, i, d, j, r, k): multiply block by block by t[i:] * d[j:] * (r[k] + i r[k+1]).

    t and d hold blocks (a vector of real parts, then one of imaginary parts).
    """
    both = bundle_of(re, 2)
    lanes = re.dtype.lanes

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        def block(at: int, offset: int) -> Any:
            index = builder.add(args[at + 1], ir.Constant(args[at + 1].type, offset))
            return emit_load(context, builder, sig.args[at], args[at], index)

        def scalar(offset: int) -> Any:
            index = builder.add(args[7], ir.Constant(args[7].type, offset))
            return emit_splat(
                builder, builder.load(pointer_to(context, builder, sig.args[6], args[6], index)), re.dtype.ir
            )

        x, y = _unpack(builder, args[0], re.count), _unpack(builder, args[1], re.count)
        rr, ri = scalar(0), scalar(1)
        for n in range(re.count):
            first, second = 2 * lanes * n, 2 * lanes * n + lanes
            a, b = _product(builder, block(2, first), block(2, second), block(4, first), block(4, second))
            a, b = _product(builder, a, b, rr, ri)
            x[n], y[n] = _product(builder, x[n], y[n], a, b)
        return _pack(context, builder, both, [_pack(context, builder, re, x), _pack(context, builder, re, y)])

    return both(re, im, t, types.intp, d, types.intp, r, types.intp), codegen


@intrinsic
def fold(typingctx: Any, bundle: Any) -> Any:
    """fold(bundle): the sum of the vectors, then for every index bit the sum with its sign (bit 0 counts +)."""
    bits = bundle.count.bit_length() - 1
    result = bundle_of(bundle.dtype, bits + 1)

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
                    totals[bit] = emit_fma(builder, x[k], y[other], totals[bit])
                    totals[bit] = emit_fma(builder, builder.fneg(y[k]), x[other], totals[bit])
        return _pack(context, builder, sums, totals)

    return sums(re, im, sums), codegen
