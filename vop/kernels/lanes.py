"""Sixteen small matrices abreast: Cholesky-like elimination on vectors of lanes.

A lane buffer is a flat array of n·n complex numbers, each stored as LANES real parts followed by LANES
imaginary parts; number (i, k) of matrix l has its real part at ``2·LANES·(i·n + k) + l``. Only i ≤ k is
used. :func:`lane_positions` tells where a packed number goes.

The three intrinsics are written as vector instructions because the compiler cannot see that the rows
of one buffer do not overlap, and would otherwise fall back to one number at a time, seven times slower.
They contain no fused or reordered operation, so that results do not depend on the width of the
machine's registers.
"""

from __future__ import annotations

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.core import cgutils
from numba.extending import intrinsic

from vop.hermitian import packed_entries

LANES = 16
_WORD = ir.IntType(64)
_BITS = ir.IntType(LANES)


def lane_positions(n: int) -> np.ndarray:
    """(n²,) int64: offset of each packed number in a lane buffer."""
    i, k, imaginary = packed_entries(n)
    return np.ascontiguousarray(LANES * (2 * (i * n + k) + imaginary), dtype=np.int64)


def _vectors(context, builder, array_type, array):
    data = context.make_array(array_type)(context, builder, array).data
    vector = ir.VectorType(context.get_data_type(array_type.dtype), LANES)
    align = array_type.dtype.bitwidth // 8

    def address(offset):
        return builder.bitcast(builder.gep(data, [offset]), vector.as_pointer())

    def load(offset):
        return builder.load(address(offset), align=align)

    def store(value, offset):
        builder.store(value, address(offset), align=align)

    return vector, load, store


def _splat(builder, value, vector):
    one = builder.insert_element(ir.Constant(vector, ir.Undefined), value, ir.Constant(ir.IntType(32), 0))
    zeros = ir.Constant(ir.VectorType(ir.IntType(32), LANES), [0] * LANES)
    return builder.shuffle_vector(one, one, zeros)


@intrinsic
def pivot(_typing, h, diagonal, inverse, alive):
    """Lanes at ``inverse`` become 1/h[diagonal]; lanes whose pivot is not positive die (0 at ``alive``).

    Returns whether any lane lives. A dead lane has inverse 0, so that it stays finite.
    """

    def generate(context, builder, signature, args):
        vector, load, store = _vectors(context, builder, signature.args[0], args[0])
        zero, one = ir.Constant(vector, [0.0] * LANES), ir.Constant(vector, [1.0] * LANES)
        value = load(args[1])
        good = builder.fcmp_ordered(">", value, zero)
        store(builder.select(good, builder.fdiv(one, value), zero), args[2])
        living = builder.select(good, load(args[3]), zero)
        store(living, args[3])
        bits = builder.bitcast(builder.fcmp_ordered(">", living, zero), _BITS)
        return builder.icmp_unsigned("!=", bits, ir.Constant(_BITS, 0))

    return types.boolean(h, types.intp, types.intp, types.intp), generate


@intrinsic
def eliminate(_typing, h, target, source, inverse, count):
    """For s < count: target_s −= conj(source_0 · inverse) · source_s, complex lanes."""

    def generate(context, builder, signature, args):
        _, load, store = _vectors(context, builder, signature.args[0], args[0])
        _, target, source, inverse, count = args
        lanes = ir.Constant(_WORD, LANES)
        scale = load(inverse)
        t_re = builder.fmul(load(source), scale)
        t_im = builder.fmul(load(builder.add(source, lanes)), scale)
        with cgutils.for_range(builder, count) as loop:
            step = builder.mul(loop.index, ir.Constant(_WORD, 2 * LANES))
            at_b, at_c = builder.add(source, step), builder.add(target, step)
            b_re, b_im = load(at_b), load(builder.add(at_b, lanes))
            c_re, c_im = load(at_c), load(builder.add(at_c, lanes))
            c_re = builder.fsub(c_re, builder.fmul(t_re, b_re))
            c_re = builder.fsub(c_re, builder.fmul(t_im, b_im))
            c_im = builder.fsub(c_im, builder.fmul(t_re, b_im))
            c_im = builder.fadd(c_im, builder.fmul(t_im, b_re))
            store(c_re, at_c)
            store(c_im, builder.add(at_c, lanes))
        return context.get_dummy_value()

    return types.void(h, types.intp, types.intp, types.intp, types.intp), generate


@intrinsic
def lanes_at_most(_typing, values, offset, limit):
    """Bit mask (int64) of the LANES numbers from ``offset`` on that are ≤ limit (NaN is not)."""

    def generate(context, builder, signature, args):
        vector, load, _ = _vectors(context, builder, signature.args[0], args[0])
        low = builder.fcmp_ordered("<=", load(args[1]), _splat(builder, args[2], vector))
        return builder.zext(builder.bitcast(low, _BITS), _WORD)

    return types.int64(values, types.intp, values.dtype), generate


@njit(cache=True, nogil=True, error_model="numpy")
def positive_lanes(h, n):
    """Which matrices of a lane buffer are numerically positive definite; the buffer is overwritten.

    h : (2·LANES·(n² + 1),) float32 or float64; imaginary parts of the diagonal are not read.

    After the call ``h[2·LANES·n² + LANES + l]`` is 1 where LDLᴴ of matrix l ran through with positive
    pivots, else 0.
    """
    inverse = 2 * LANES * n * n
    alive = inverse + LANES
    for lane in range(LANES):
        h[alive + lane] = 1.0
    for j in range(n):
        if not pivot(h, 2 * LANES * (j * n + j), inverse, alive):
            return
        for i in range(j + 1, n):
            eliminate(h, 2 * LANES * (i * n + i), 2 * LANES * (j * n + i), inverse, n - i)
