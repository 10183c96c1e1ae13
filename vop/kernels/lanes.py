"""Sixteen small matrices abreast: elimination and least eigenvalues on vectors of lanes.

A lane buffer is a flat array, float32 or float64, of :func:`lane_buffer_size` numbers. It begins with n·n
complex numbers, each stored as LANES real parts followed by LANES imaginary parts: number (i, k) of
matrix l has its real part at ``2·LANES·(i·n + k) + l``. Only i ≤ k is used, and no imaginary part of
the diagonal. :func:`lane_positions` tells where a packed number goes. Scratch follows.

The intrinsics are written as vector instructions because the compiler cannot see that the rows of one
buffer do not overlap, and would otherwise fall back to one number at a time, seven times slower. They
contain no fused or reordered operation, so that results do not depend on the width of the machine's
registers.
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


@njit(cache=True, nogil=True)
def lane_buffer_size(n):
    """Numbers in a lane buffer for n×n matrices: the matrices, a vector, and lanes of scratch."""
    return LANES * (2 * n * n + 3 * n + 4)


class _Lanes:
    """A vector of lanes in the instructions being built; operators act on each lane."""

    def __init__(self, builder, value):
        self.builder, self.value = builder, value

    def _made(self, value):
        return _Lanes(self.builder, value)

    def __add__(self, other):
        return self._made(self.builder.fadd(self.value, other.value))

    def __sub__(self, other):
        return self._made(self.builder.fsub(self.value, other.value))

    def __mul__(self, other):
        return self._made(self.builder.fmul(self.value, other.value))

    def __truediv__(self, other):
        return self._made(self.builder.fdiv(self.value, other.value))

    def __gt__(self, other):
        return self._made(self.builder.fcmp_ordered(">", self.value, other.value))

    def __le__(self, other):
        return self._made(self.builder.fcmp_ordered("<=", self.value, other.value))

    def __and__(self, other):
        return self._made(self.builder.and_(self.value, other.value))

    def choose(self, yes, no):
        """Where this mask is set, ``yes``, else ``no``."""
        return self._made(self.builder.select(self.value, yes.value, no.value))

    def sqrt(self):
        """Correctly rounded square roots."""
        vector = self.value.type
        name = f"llvm.sqrt.v{LANES}f{64 if vector.element == ir.DoubleType() else 32}"
        function = cgutils.get_or_insert_function(
            self.builder.module, ir.FunctionType(vector, [vector]), name
        )
        return self._made(self.builder.call(function, [self.value]))

    def bits(self):
        """This mask as an integer of LANES bits."""
        return self.builder.bitcast(self.value, _BITS)

    def any(self):
        """Whether this mask is set anywhere."""
        return self.builder.icmp_unsigned("!=", self.bits(), ir.Constant(_BITS, 0))


class _Buffer:
    """The array argument of an intrinsic, read and written LANES numbers at a time."""

    def __init__(self, context, builder, array_type, array):
        self.builder = builder
        self.data = context.make_array(array_type)(context, builder, array).data
        self.element = context.get_data_type(array_type.dtype)
        self.vector = ir.VectorType(self.element, LANES)
        self.align = array_type.dtype.bitwidth // 8

    def _address(self, offset):
        return self.builder.bitcast(self.builder.gep(self.data, [offset]), self.vector.as_pointer())

    def load(self, offset):
        return _Lanes(self.builder, self.builder.load(self._address(offset), align=self.align))

    def store(self, lanes, offset):
        self.builder.store(lanes.value, self._address(offset), align=self.align)

    def load_complex(self, offset):
        return self.load(offset), self.load(self.after(offset, LANES))

    def store_complex(self, re, im, offset):
        self.store(re, offset)
        self.store(im, self.after(offset, LANES))

    def after(self, offset, numbers):
        return self.builder.add(offset, ir.Constant(_WORD, numbers))

    def constant(self, number):
        return _Lanes(self.builder, ir.Constant(self.vector, [number] * LANES))

    def splat(self, value):
        first = ir.Constant(ir.IntType(32), 0)
        one = self.builder.insert_element(ir.Constant(self.vector, ir.Undefined), value, first)
        zeros = ir.Constant(ir.VectorType(ir.IntType(32), LANES), [0] * LANES)
        return _Lanes(self.builder, self.builder.shuffle_vector(one, one, zeros))

    def running(self, lanes):
        """A variable that starts as ``lanes`` and can be set in a loop."""
        place = cgutils.alloca_once(self.builder, self.vector)
        self.builder.store(lanes.value, place)
        return _Running(self.builder, place)

    def complex_steps(self, count):
        """Loop over ``count`` complex numbers; yields the offset of each, relative."""
        return _steps(self.builder, count, 2 * LANES)


class _Running:
    def __init__(self, builder, place):
        self.builder, self.place = builder, place

    def get(self):
        return _Lanes(self.builder, self.builder.load(self.place))

    def set(self, lanes):
        self.builder.store(lanes.value, self.place)


class _steps:
    def __init__(self, builder, count, stride):
        self.builder, self.count, self.stride = builder, count, stride

    def __enter__(self):
        self.loop = cgutils.for_range(self.builder, self.count)
        return self.builder.mul(self.loop.__enter__().index, ir.Constant(_WORD, self.stride))

    def __exit__(self, *error):
        return self.loop.__exit__(*error)


@intrinsic
def subtract_rows(_typing, h, positions, minuend, rows, index):
    """Lane l of the matrices in ``h`` = minuend − rows[index[l]], in the type of h.

    positions : :func:`lane_positions`. minuend : (n²,) packed, type of h. rows : (N, n²) float32 packed,
    C-contiguous. index : (LANES,) int64, not negative.
    """

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        where, top, table, chosen = (
            context.make_array(kind)(context, builder, value)
            for kind, value in zip(signature.args[1:], args[1:], strict=True)
        )
        width = builder.extract_value(table.shape, 1)
        starts = []
        for lane in range(LANES):
            row = builder.load(builder.gep(chosen.data, [ir.Constant(_WORD, lane)]))
            starts.append(builder.gep(table.data, [builder.mul(row, width)]))
        with _steps(builder, width, 1) as at:
            column = ir.Constant(ir.VectorType(ir.FloatType(), LANES), ir.Undefined)
            for lane, start in enumerate(starts):
                number = builder.load(builder.gep(start, [at]))
                column = builder.insert_element(column, number, ir.Constant(ir.IntType(32), lane))
            if buffer.element != ir.FloatType():
                column = builder.fpext(column, buffer.vector)
            value = buffer.splat(builder.load(builder.gep(top.data, [at]))) - _Lanes(builder, column)
            buffer.store(value, builder.load(builder.gep(where.data, [at])))
        return context.get_dummy_value()

    if rows.dtype != types.float32 or minuend.dtype != h.dtype or index.dtype != types.int64:
        raise TypeError("rows must be float32, minuend of the type of h, index int64")
    return types.void(h, positions, minuend, rows, index), generate


@intrinsic
def _pivot(_typing, h, diagonal, inverse, alive):
    """Lanes at ``inverse`` become 1/h[diagonal]; lanes whose pivot is not positive die (0 at ``alive``).

    Returns whether any lane lives. A dead lane has inverse 0, so that it stays finite.
    """

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        zero, one = buffer.constant(0.0), buffer.constant(1.0)
        value = buffer.load(args[1])
        good = value > zero
        buffer.store(good.choose(one / value, zero), args[2])
        living = good.choose(buffer.load(args[3]), zero)
        buffer.store(living, args[3])
        return (living > zero).any()

    return types.boolean(h, types.intp, types.intp, types.intp), generate


@intrinsic
def _eliminate(_typing, h, target, source, inverse, count):
    """For s < count: target_s −= conj(source_0 · inverse) · source_s, complex lanes."""

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        _, target, source, inverse, count = args
        scale = buffer.load(inverse)
        t_re, t_im = buffer.load_complex(source)
        t_re, t_im = t_re * scale, t_im * scale
        with buffer.complex_steps(count) as step:
            b_re, b_im = buffer.load_complex(builder.add(source, step))
            at = builder.add(target, step)
            c_re, c_im = buffer.load_complex(at)
            buffer.store_complex(c_re - t_re * b_re - t_im * b_im, c_im - t_re * b_im + t_im * b_re, at)
        return context.get_dummy_value()

    return types.void(h, types.intp, types.intp, types.intp, types.intp), generate


@intrinsic
def lanes_at_most(_typing, values, offset, limit):
    """Bit mask (int64) of the LANES numbers from ``offset`` on that are ≤ limit (NaN is not)."""

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        low = buffer.load(args[1]) <= buffer.splat(args[2])
        return builder.zext(low.bits(), _WORD)

    return types.int64(values, types.intp, values.dtype), generate


@njit(cache=True, nogil=True, error_model="numpy")
def positive_lanes(h, n):
    """Bit mask (int64): lanes whose matrix is numerically positive definite. ``h`` is overwritten.

    A lane counts where LDLᴴ runs through with positive pivots, with the rounding of h's own type.
    """
    inverse = 2 * LANES * n * n
    alive = inverse + LANES
    for lane in range(LANES):
        h[alive + lane] = 1.0
    for j in range(n):
        if not _pivot(h, 2 * LANES * (j * n + j), inverse, alive):
            return 0
        for i in range(j + 1, n):
            _eliminate(h, 2 * LANES * (i * n + i), 2 * LANES * (j * n + i), inverse, n - i)
    mask = 0
    for lane in range(LANES):
        if h[alive + lane] > 0.0:
            mask |= 1 << lane
    return mask


@intrinsic
def _reflector(_typing, h, row, count, norm2, factor):
    """Householder vector u = y + e^{i arg y₀}‖y‖e₁ in place of y, ``count`` complex lanes at ``row``.

    Writes ‖y‖² at ``norm2`` and 2/‖u‖² (0 for y = 0) at ``factor``.
    """

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        _, row, count, norm2, factor = args
        zero, one = buffer.constant(0.0), buffer.constant(1.0)
        total = buffer.running(zero)
        with buffer.complex_steps(count) as step:
            re, im = buffer.load_complex(builder.add(row, step))
            total.set(total.get() + re * re + im * im)
        square = total.get()
        buffer.store(square, norm2)
        norm = square.sqrt()
        re, im = buffer.load_complex(row)
        size = (re * re + im * im).sqrt()
        moved = size > zero
        stretch = one + norm / moved.choose(size, one)
        buffer.store_complex(moved.choose(re * stretch, norm), im * stretch, row)
        some = square > zero
        buffer.store(some.choose(one / some.choose(norm * (norm + size), one), zero), factor)
        return context.get_dummy_value()

    return types.void(h, types.intp, types.intp, types.intp, types.intp), generate


@intrinsic
def _conjugate_product_row(_typing, h, row, u, s, count):
    """Share of row i in s = conj(H)u: s_i += H_ii u_i + Σ conj(H_ik) u_k and s_k += H_ik u_i, k > i.

    ``row`` is the offset of H_ii, ``u`` that of u_i, ``s`` that of s_i; count is n − i.
    """

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        _, row, u, s, count = args
        u_re, u_im = buffer.load_complex(u)
        diagonal = buffer.load(row)
        s_re, s_im = buffer.load_complex(s)
        sum_re = buffer.running(s_re + diagonal * u_re)
        sum_im = buffer.running(s_im + diagonal * u_im)
        with buffer.complex_steps(builder.sub(count, ir.Constant(_WORD, 1))) as step:
            step = buffer.after(step, 2 * LANES)
            h_re, h_im = buffer.load_complex(builder.add(row, step))
            v_re, v_im = buffer.load_complex(builder.add(u, step))
            sum_re.set(sum_re.get() + h_re * v_re + h_im * v_im)
            sum_im.set(sum_im.get() + h_re * v_im - h_im * v_re)
            at = builder.add(s, step)
            t_re, t_im = buffer.load_complex(at)
            buffer.store_complex(t_re + h_re * u_re - h_im * u_im, t_im + h_re * u_im + h_im * u_re, at)
        buffer.store_complex(sum_re.get(), sum_im.get(), s)
        return context.get_dummy_value()

    return types.void(h, types.intp, types.intp, types.intp, types.intp), generate


@intrinsic
def _orthogonalise(_typing, h, s, u, count, factor):
    """r = τs − ½τ²(uᴴs)u in place of s, τ at ``factor``; uᴴs is real because H is Hermitian."""

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        _, s, u, count, factor = args
        tau = buffer.load(factor)
        inner = buffer.running(buffer.constant(0.0))
        with buffer.complex_steps(count) as step:
            s_re, s_im = buffer.load_complex(builder.add(s, step))
            u_re, u_im = buffer.load_complex(builder.add(u, step))
            inner.set(inner.get() + s_re * u_re + s_im * u_im)
        part = buffer.constant(0.5) * tau * tau * inner.get()
        with buffer.complex_steps(count) as step:
            at = builder.add(s, step)
            s_re, s_im = buffer.load_complex(at)
            u_re, u_im = buffer.load_complex(builder.add(u, step))
            buffer.store_complex(tau * s_re - part * u_re, tau * s_im - part * u_im, at)
        return context.get_dummy_value()

    return types.void(h, types.intp, types.intp, types.intp, types.intp), generate


@intrinsic
def _rank_two_row(_typing, h, row, u, r, count):
    """For s < count: row_s −= conj(u_0)·r_s + conj(r_0)·u_s, complex lanes."""

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        _, row, u, r, count = args
        u_re, u_im = buffer.load_complex(u)
        r_re, r_im = buffer.load_complex(r)
        with buffer.complex_steps(count) as step:
            a_re, a_im = buffer.load_complex(builder.add(r, step))
            b_re, b_im = buffer.load_complex(builder.add(u, step))
            at = builder.add(row, step)
            c_re, c_im = buffer.load_complex(at)
            c_re = c_re - u_re * a_re - u_im * a_im - r_re * b_re - r_im * b_im
            c_im = c_im - u_re * a_im + u_im * a_re - r_re * b_im + r_im * b_re
            buffer.store_complex(c_re, c_im, at)
        return context.get_dummy_value()

    return types.void(h, types.intp, types.intp, types.intp, types.intp), generate


@intrinsic
def _gershgorin(_typing, h, diagonal, stride, squares, n, x, small):
    """A lower bound of all eigenvalues of tridiagonal matrices at ``x``, 4u of their size at ``small``."""

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        _, diagonal, stride, squares, n, x, small = args
        zero = buffer.constant(0.0)
        low, size, before = (buffer.running(v) for v in (buffer.constant(np.inf), zero, zero))
        with _steps(builder, n, 1) as i:
            d = buffer.load(builder.add(diagonal, builder.mul(i, stride)))
            e = buffer.load(builder.add(squares, builder.mul(i, ir.Constant(_WORD, LANES)))).sqrt()
            radius = before.get() + e
            least, most = d - radius, (d > zero).choose(d, zero - d) + radius
            low.set((least > low.get()).choose(low.get(), least))
            size.set((most > size.get()).choose(most, size.get()))
            before.set(e)
        roundoff = 2.0**-53 if buffer.element == ir.DoubleType() else 2.0**-24
        # A start just below the bound: on it, a diagonal matrix would give a zero pivot at once.
        buffer.store(low.get() - buffer.constant(8.0 * roundoff) * size.get(), x)
        buffer.store(buffer.constant(4.0 * roundoff) * size.get(), small)
        return context.get_dummy_value()

    return types.void(h, *(types.intp,) * 6), generate


@intrinsic
def _laguerre(_typing, h, diagonal, stride, squares, n, x, small):
    """One step of Laguerre's iteration from ``x`` towards the least eigenvalue; whether any lane goes on.

    From the left of all roots it climbs monotonically to the least (Wilkinson, The Algebraic Eigenvalue
    Problem, 1965, ch. 7). The derivatives come from the ratios q_i of leading minors, which are positive
    there: a ratio that is not says that rounding has carried x past the root, which is then reached. A
    lane that is done has ``small`` set to infinity and moves no more.
    """

    def generate(context, builder, signature, args):
        buffer = _Buffer(context, builder, signature.args[0], args[0])
        _, diagonal, stride, squares, n, x, small = args
        zero, one, two = (buffer.constant(v) for v in (0.0, 1.0, 2.0))
        at = buffer.load(x)
        limit = buffer.load(small)
        first, second, inverse, r, s, e2, good = (
            buffer.running(v) for v in (zero, zero, zero, zero, zero, zero, one)
        )
        with _steps(builder, n, 1) as i:
            d = buffer.load(builder.add(diagonal, builder.mul(i, stride)))
            t = e2.get() * inverse.get()
            q = (d - at) - t
            positive = q > zero
            good.set(positive.choose(good.get(), zero))
            over = one / positive.choose(q, one)
            old = r.get()
            s.set(t * (s.get() - two * old * old) * over)
            r.set((t * old - one) * over)
            inverse.set(over)
            first.set(first.get() - r.get())
            second.set(second.get() + r.get() * r.get() - s.get())
            e2.set(buffer.load(builder.add(squares, builder.mul(i, ir.Constant(_WORD, LANES)))))
        count = buffer.splat(builder.sitofp(n, buffer.element))
        root = (count - one) * (count * second.get() - first.get() * first.get())
        step = count / (first.get() + (root > zero).choose(root, zero).sqrt())
        moving = (good.get() > zero) & (limit <= buffer.constant(np.finfo(np.float32).max))
        buffer.store(moving.choose(at + step, at), x)
        going = moving & (step > limit)
        buffer.store(going.choose(limit, buffer.constant(np.inf)), small)
        return going.any()

    return types.boolean(h, *(types.intp,) * 6), generate


@njit(cache=True, nogil=True, error_model="numpy")
def least_eigenvalues(h, n, out):
    """λmin of each matrix of a lane buffer into ``out`` (LANES,); ``h`` is overwritten.

    Householder reduction to tridiagonal form (Golub & Van Loan, Matrix Computations, 4th ed., §8.3),
    then Laguerre's iteration from below. Correct to rounding; where many eigenvalues crowd at the low
    end, the iteration may stop early, 10⁻¹² of the norm too low at most as far as seen.
    """
    wide = 2 * LANES
    s = wide * n * n
    squares = s + wide * n
    scratch = squares + LANES * n
    factor, x, small = scratch, scratch + LANES, scratch + 2 * LANES
    for k in range(n - 1):
        u = wide * (k * n + k + 1)
        if k == n - 2:
            for lane in range(LANES):
                h[squares + LANES * k + lane] = (
                    h[u + lane] * h[u + lane] + h[u + LANES + lane] * h[u + LANES + lane]
                )
            break
        _reflector(h, u, n - k - 1, squares + LANES * k, factor)
        for p in range(s, s + wide * (n - k - 1)):
            h[p] = 0.0
        for i in range(k + 1, n):
            j = wide * (i - k - 1)
            _conjugate_product_row(h, wide * (i * n + i), u + j, s + j, n - i)
        _orthogonalise(h, s, u, n - k - 1, factor)
        for i in range(k + 1, n):
            j = wide * (i - k - 1)
            _rank_two_row(h, wide * (i * n + i), u + j, s + j, n - i)
    for lane in range(LANES):
        h[squares + LANES * (n - 1) + lane] = 0.0
    stride = wide * (n + 1)
    _gershgorin(h, 0, stride, squares, n, x, small)
    for _ in range(60):
        if not _laguerre(h, 0, stride, squares, n, x, small):
            break
    for lane in range(LANES):
        out[lane] = h[x + lane]
