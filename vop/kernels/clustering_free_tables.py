"""Values tr(Q_v X) of many matrices on many covariances, summed in a fixed order.

BLAS would be faster, but the order of its sums may depend on the number of threads, and cores are chosen
by comparing these values. Sixteen functionals are worked on abreast, for four rows at a time.
"""

from __future__ import annotations

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.core import cgutils
from numba.extending import intrinsic

#: Functionals abreast, and rows at a time.
WIDE, DEEP = 16, 4

_WORD = ir.IntType(64)
_VECTOR = ir.VectorType(ir.FloatType(), WIDE)


@intrinsic
def _products(_typing, rows, first, blocks, block, out):
    """out[r, l] = Σ_p rows[first + r, p] · blocks[block, p, l] for r < DEEP, l < WIDE; float32, in p order.

    rows (N, P), blocks (B, P, WIDE), out (DEEP, WIDE): C-contiguous float32.
    """

    def generate(context, builder, signature, args):
        def data(place):
            return context.make_array(signature.args[place])(context, builder, args[place])

        table, factors, result = data(0), data(2), data(4)
        width = builder.extract_value(table.shape, 1)
        starts = []
        for r in range(DEEP):
            row = builder.add(args[1], ir.Constant(_WORD, r))
            starts.append(builder.gep(table.data, [builder.mul(row, width)]))
        base = builder.mul(builder.mul(args[3], width), ir.Constant(_WORD, WIDE))
        sums = []
        for _ in range(DEEP):
            place = cgutils.alloca_once(builder, _VECTOR)
            builder.store(ir.Constant(_VECTOR, [0.0] * WIDE), place)
            sums.append(place)
        zeros = ir.Constant(ir.VectorType(ir.IntType(32), WIDE), [0] * WIDE)
        with cgutils.for_range(builder, width) as loop:
            at = builder.add(base, builder.mul(loop.index, ir.Constant(_WORD, WIDE)))
            pointer = builder.bitcast(builder.gep(factors.data, [at]), _VECTOR.as_pointer())
            factor = builder.load(pointer, align=4)
            for start, place in zip(starts, sums, strict=True):
                number = builder.load(builder.gep(start, [loop.index]))
                one = builder.insert_element(
                    ir.Constant(_VECTOR, ir.Undefined), number, ir.Constant(ir.IntType(32), 0)
                )
                splat = builder.shuffle_vector(one, one, zeros)
                builder.store(builder.fadd(builder.load(place), builder.fmul(splat, factor)), place)
        for r, place in enumerate(sums):
            pointer = builder.gep(result.data, [ir.Constant(_WORD, r * WIDE)])
            builder.store(builder.load(place), builder.bitcast(pointer, _VECTOR.as_pointer()), align=4)
        return context.get_dummy_value()

    if not rows.dtype == blocks.dtype == out.dtype == types.float32:
        raise TypeError("rows, blocks and out must be float32")
    return types.void(rows, types.intp, blocks, types.intp, out), generate


def in_blocks(functionals: np.ndarray) -> np.ndarray:
    """Functionals (M, n²) as (⌈M/WIDE⌉, n², WIDE) float32 blocks, filled up with zeros."""
    count, width = functionals.shape
    blocks = np.zeros((-(-count // WIDE), width, WIDE), np.float32)
    for lane in range(WIDE):
        part = functionals[lane::WIDE]
        blocks[: len(part), :, lane] = part
    return blocks


@njit(cache=True, nogil=True, error_model="numpy")
def fill_table(packed, rows, blocks, n_functionals, out):
    """out[k, m] = tr(Q X_m) of row rows[k]; packed (N, n²) and out (len(rows), n_functionals) float32."""
    width = packed.shape[1]
    some = np.empty((DEEP, width), dtype=np.float32)
    sums = np.empty((DEEP, WIDE), dtype=np.float32)
    for start in range(0, rows.shape[0], DEEP):
        count = min(DEEP, rows.shape[0] - start)
        for r in range(DEEP):
            row = rows[start + min(r, count - 1)]
            for p in range(width):
                some[r, p] = packed[row, p]
        for b in range(blocks.shape[0]):
            _products(some, 0, blocks, b, sums)
            for r in range(count):
                for lane in range(min(WIDE, n_functionals - b * WIDE)):
                    out[start + r, b * WIDE + lane] = sums[r, lane]


@njit(cache=True, nogil=True, error_model="numpy")
def largest_values(packed, first, last, blocks, best, best_row):
    """Largest tr(Q_v X_m) over rows first … last − 1, and the first row that has it.

    blocks : (B, n², WIDE). best (B·WIDE,) float32 and best_row (B·WIDE,) int64 are written.
    """
    width = packed.shape[1]
    some = np.empty((DEEP, width), dtype=np.float32)
    sums = np.empty((DEEP, WIDE), dtype=np.float32)
    for m in range(best.shape[0]):
        best[m] = -np.inf
        best_row[m] = first
    for start in range(first, last, DEEP):
        count = min(DEEP, last - start)
        for r in range(DEEP):
            for p in range(width):
                some[r, p] = packed[start + min(r, count - 1), p]
        for b in range(blocks.shape[0]):
            _products(some, 0, blocks, b, sums)
            for r in range(count):
                for lane in range(WIDE):
                    if sums[r, lane] > best[b * WIDE + lane]:
                        best[b * WIDE + lane] = sums[r, lane]
                        best_row[b * WIDE + lane] = start + r
