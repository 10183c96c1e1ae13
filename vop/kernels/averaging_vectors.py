"""Vector instructions of the averaging kernels: LANES float64 numbers side by side.

Written as instructions because the compiler would not put neighbouring lanes together by itself, and go
one number at a time, four times slower. They contain no fused or reordered operation, so that results do
not depend on the width of the machine's registers. Nothing here checks bounds.
"""

from __future__ import annotations

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic

#: Matrix entries side by side: one cache line of float64.
LANES = 8
#: Cells of a row that are handled in one go.
STRETCH = 16

_WORD = ir.IntType(64)
_VECTOR = ir.VectorType(ir.DoubleType(), LANES)


def _data(context, builder, array_type, array):
    return context.make_array(array_type)(context, builder, array).data


def _address(builder, data, offset):
    return builder.bitcast(builder.gep(data, [offset]), _VECTOR.as_pointer())


def _load(builder, data, offset):
    return builder.load(_address(builder, data, offset), align=8)


def _store(builder, value, data, offset):
    builder.store(value, _address(builder, data, offset), align=8)


def _after(builder, offset, count):
    return builder.add(offset, ir.Constant(_WORD, count))


def _splat(builder, value):
    out = ir.Constant(_VECTOR, ir.Undefined)
    for lane in range(LANES):
        out = builder.insert_element(out, value, ir.Constant(ir.IntType(32), lane))
    return out


@intrinsic
def add_plane(typing, sums, table, lines, line, xs, x, wy, y, wx, w, scale):
    """sums += scale · Σ_y wy[y] Σ_x wx[x] table[lines[y] + xs[x] …], four y and four x.

    sums : (LANES,). table : flat, float64. lines, xs : flat int64, offsets lines[line + y], xs[x + ·];
    wy, wx : flat float64, weights wy[y + ·], wx[w + ·].
    """
    arrays = (sums, table, lines, xs, wy, wx)
    if not all(isinstance(a, types.Array) and a.ndim == 1 for a in arrays):
        return None
    signature = types.void(
        sums, table, lines, types.intp, xs, types.intp, wy, types.intp, wx, types.intp, types.float64
    )

    def generate(context, builder, sig, arguments):
        kinds = sig.args
        d_sums, d_table, d_lines, d_xs, d_wy, d_wx = (
            _data(context, builder, kinds[m], arguments[m]) for m in (0, 1, 2, 4, 6, 8)
        )
        o_line, o_x, o_y, o_w, factor = (arguments[m] for m in (3, 5, 7, 9, 10))

        def entry(data, offset, m):
            return builder.load(builder.gep(data, [_after(builder, offset, m)]))

        places = [entry(d_xs, o_x, m) for m in range(4)]
        weights = [_splat(builder, entry(d_wx, o_w, m)) for m in range(4)]
        total = None
        for y_node in range(4):
            base = entry(d_lines, o_line, y_node)
            along = None
            for place, weight in zip(places, weights, strict=True):
                part = builder.fmul(weight, _load(builder, d_table, builder.add(base, place)))
                along = part if along is None else builder.fadd(along, part)
            w_line = _splat(builder, builder.fmul(factor, entry(d_wy, o_y, y_node)))
            part = builder.fmul(w_line, along)
            total = part if total is None else builder.fadd(total, part)
        zero = ir.Constant(_WORD, 0)
        _store(builder, builder.fadd(_load(builder, d_sums, zero), total), d_sums, zero)
        return context.get_dummy_value()

    return signature, generate


@intrinsic
def sum_stretch(typing, products, count, run, sums, below, here, at):
    """Add ``count`` cells of a row to summed volumes.

    products : flat, entry b of cell i at b·STRETCH + i. run : (LANES,), sum along x so far, updated.
    sums : flat, sum over rows so far, lanes innermost, updated from offset ``at`` on;
    here = below + sums at the same offsets.
    """
    if not all(isinstance(a, types.Array) and a.ndim == 1 for a in (products, run, sums, below, here)):
        return None
    signature = types.void(products, types.intp, run, sums, below, here, types.intp)

    def generate(context, builder, sig, arguments):
        kinds = sig.args
        d_products, d_run, d_sums, d_below, d_here = (
            _data(context, builder, kinds[m], arguments[m]) for m in (0, 2, 3, 4, 5)
        )
        number, start = arguments[1], arguments[6]
        zero = ir.Constant(_WORD, 0)
        place = cgutils.alloca_once_value(builder, _load(builder, d_run, zero))
        with cgutils.for_range(builder, number) as loop:
            cell = ir.Constant(_VECTOR, ir.Undefined)
            for lane in range(LANES):
                one = builder.load(builder.gep(d_products, [_after(builder, loop.index, lane * STRETCH)]))
                cell = builder.insert_element(cell, one, ir.Constant(ir.IntType(32), lane))
            total = builder.fadd(builder.load(place), cell)
            builder.store(total, place)
            offset = builder.add(start, builder.mul(loop.index, ir.Constant(_WORD, LANES)))
            both = builder.fadd(_load(builder, d_sums, offset), total)
            _store(builder, both, d_sums, offset)
            _store(builder, builder.fadd(_load(builder, d_below, offset), both), d_here, offset)
        _store(builder, builder.load(place), d_run, zero)
        return context.get_dummy_value()

    return signature, generate
