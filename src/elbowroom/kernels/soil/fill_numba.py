"""Compiled fill over real ground: the direct kernel and a bicubic table look-up.

What keeps the compiler from vectorising such a loop is the look-up: every pair of points reads another place of the table, and
gathering 128 numbers for each costs more than all the rest.  Here the eight numbers of a table node (four complex kernels) lie
side by side and are interpolated together, one pair after another; then eight pairs are transposed.  The steps before the
look-up work on sixteen pairs at a time and leave what they find in short arrays: weights are then spread by loads, where
shuffles would be the bottleneck.  Reciprocal roots start from single precision and take one step of Newton's.  Measured
and not kept: the next row prepared while one is looked up, the preparation cut into shorter loops, division-free places.
"""

import math

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic

from elbowroom.kernels.accelerate import FAST_JIT_OPTIONS, JIT_OPTIONS
from elbowroom.kernels.points_numba import C0, C1, C2, C3, C4, C5, S0, S1, S2, S3, S4, S5
from elbowroom.kernels.soil.lanes import Lanes, transpose

_NEIGHBOURS = 4
_AT_ONCE = 16
"""Pairs prepared at once: as many as single precision fits; double precision works in two halves."""

_FLOAT, _DOUBLE = ir.FloatType(), ir.DoubleType()


def _path(square, short, kind):
    """Return 1/R, and what is left of R after whole turns, in a precision, from R^2 (in wavelengths) in both precisions."""
    y = 1.0 / short.call("sqrt")
    slope = y.as_kind(_DOUBLE)
    root = square * slope
    miss = 1.0 - root * slope
    # One step of Newton's iteration makes 14 digits of seven.
    turns = root + (0.5 * root) * miss
    inverse = y if kind == _FLOAT else slope + (0.5 * slope) * miss
    return inverse.as_kind(kind), (turns - turns.call("rint")).as_kind(kind)


def _wave(inverse, rest):
    """Return real and imaginary part of exp(-jkR)/R, by the polynomials of ``points_numba``."""
    v = rest * rest
    s = rest * (S0 + v * (S1 + v * (S2 + v * (S3 + v * (S4 + v * S5)))))
    c = C0 + v * (C1 + v * (C2 + v * (C3 + v * (C4 + v * C5))))
    twice = 2.0 * inverse * s
    return inverse - twice * s, -1.0 * (twice * c)


def _six_spline_weights(t):
    """Return six times the weights of a cubic B-spline."""
    s = 1.0 - t
    t2, s2 = t * t, s * s
    return [s * s2, 4.0 + t2 * (3.0 * t - 6.0), 4.0 + s2 * (3.0 * s - 6.0), t * t2]


class _Access:
    """Pointers into the arrays that an intrinsic is given, and integers of the compiler's."""

    def __init__(self, context, builder, kinds, values):
        self.context, self.builder, self.kinds, self.values = context, builder, kinds, values

    def whole(self, number):
        return ir.Constant(self.context.get_value_type(types.intp), number)

    def at(self, position, offset):
        array = self.context.make_array(self.kinds[position])(self.context, self.builder, self.values[position])
        return self.builder.gep(array.data, [offset])

    def part(self, position, offset, part, length):
        """Return the pointer to ``offset`` in a part of an array whose parts have a length."""
        return self.at(position, self.builder.add(offset, self.builder.mul(self.whole(part), length)))


@intrinsic
def prepare(typing_context, x, y, z, x2, y2, z2, start, turns, grid, sizes, image, straight, weights, index, slot):
    """Work out what pairs from ``start`` on need and keep it from ``slot`` on: waves, spline weights, places in the table.

    ``image`` and ``straight`` (2, B): real and imaginary part of exp(-jkR)/R of the two paths, ``straight`` None where it
    is not wanted; ``weights``: (4, B) along rho, then (B, 4) along Z; ``index`` (B); B stands last in ``sizes``.  Lengths are
    in wavelengths, ``turns`` is 1 over the wavelength.
    """
    kinds = (x, y, z, x2, y2, z2, start, turns, grid, sizes, image, straight, weights, index, slot)

    def generate(context, builder, signature, values):
        access = _Access(context, builder, kinds, values)
        start, slot = values[6], values[14]
        kind = context.get_value_type(weights.dtype)

        def same(scalar):
            return Lanes.same(builder, scalar, _AT_ONCE)

        rho_scale, rho_nodes, z_scale, z_nodes, z_start = (same(builder.load(access.at(8, access.whole(n)))) for n in range(5))
        last_rho, last_z, stride, odd, block = (builder.load(access.at(9, access.whole(n))) for n in range(5))
        block = builder.sext(block, start.type)
        second = [Lanes.load(builder, access.at(3 + n, start), _AT_ONCE) for n in range(3)]
        dx, dy = (same(values[n]) - second[n] for n in (0, 1))
        own = same(values[2])
        top = own + second[2]
        flat = dx * dx + dy * dy
        # In the table's own precision; the small number keeps points above one another from dividing by zero.
        short, up = (flat + 1e-30).as_kind(kind), top.as_kind(kind)

        def keep(square, approximate, position):
            like = context.get_value_type(kinds[position].dtype)
            inverse, rest = _path(square, approximate.as_kind(_FLOAT), like)
            for n, value in enumerate(_wave(inverse * same(values[7]).as_kind(like), rest)):
                value.store(access.part(position, slot, n, block))

        keep(flat + top * top, short + up * up, 10)
        if straight != types.none:
            dz = own - second[2]
            keep(flat + dz * dz, flat + dz * dz, 11)
        rho = short.call("sqrt")
        low, left = up + z_scale, rho + rho_scale
        both = 1.0 / (low * left)
        i, s = (rho * low * (both * rho_nodes)).whole_and_rest(last_rho)
        j, t = (up * left * (both * z_nodes) - z_start).whole_and_rest(last_z)

        def whole_lanes(constant):
            return ir.Constant(j.type, [ir.Constant(j.type.element, constant)] * _AT_ONCE)

        parity = builder.and_(j, whole_lanes(1))
        place = builder.mul(i, same(stride).value)
        place = builder.add(place, builder.shl(builder.sub(j, parity), whole_lanes(3)))
        place = builder.add(place, builder.mul(parity, same(odd).value))
        Lanes(builder, place).store(access.at(13, slot))
        for n, value in enumerate(_six_spline_weights(s)):
            value.store(access.part(12, slot, n, block))
        a, b, c, d = _six_spline_weights(t)
        for start_lane in range(0, _AT_ONCE, 4):
            two = [start_lane + n // 2 + _AT_ONCE * (n % 2) for n in range(8)]
            low_two, high_two = a.pick(two, b), c.pick(two, d)
            four = low_two.pick([(n // 4) * 2 + n % 2 + 8 * (n // 2 % 2) for n in range(16)], high_two)
            first = builder.add(slot, access.whole(start_lane))
            four.store(access.at(12, builder.mul(access.whole(4), builder.add(block, first))))
        return context.get_dummy_value()

    return types.void(*kinds), generate


@intrinsic
def finish(typing_context, image, straight, weights, index, slot, sizes, table, out, offset, plane):
    """Look eight prepared pairs up in the table, and put their kernels into eight planes of ``out``."""
    kinds = (image, straight, weights, index, slot, sizes, table, out, offset, plane)

    def generate(context, builder, signature, values):
        access = _Access(context, builder, kinds, values)
        slot, offset, plane = values[4], values[8], values[9]
        stride, block = (builder.sext(builder.load(access.at(5, access.whole(n))), slot.type) for n in (2, 4))
        table_rows = [access.part(6, access.whole(0), n, stride) for n in range(_NEIGHBOURS)]
        rows = []
        for pair in range(8):
            place = builder.add(slot, access.whole(pair))
            position = builder.sext(builder.load(access.at(3, place)), slot.type)
            lower = upper = None
            for n, table_row in enumerate(table_rows):
                weight = Lanes.same(builder, builder.load(access.part(2, place, n, block)), 16)
                node = builder.gep(table_row, [position])
                one = Lanes.load(builder, node, 16) * weight
                two = Lanes.load(builder, builder.gep(node, [access.whole(16)]), 16) * weight
                lower, upper = (one, two) if lower is None else (lower + one, upper + two)
            four = Lanes.load(builder, access.at(2, builder.mul(access.whole(4), builder.add(block, place))), 4)
            total = lower * four.pick([0] * 8 + [1] * 8) + upper * four.pick([2] * 8 + [3] * 8)
            rows.append(total.pick(range(8)) + total.pick(range(8, 16)))
        real, imag = (Lanes.load(builder, access.part(0, slot, n, block), 8) for n in (0, 1))
        columns = transpose(rows)
        for n in range(8):
            p, q = columns[n - n % 2], columns[n - n % 2 + 1]
            target = access.part(7, offset, n, plane)
            value = (real * p - imag * q if n % 2 == 0 else real * q + imag * p).as_kind(target.type.pointee)
            if straight != types.none and n < 6:
                value += Lanes.load(builder, access.part(1, slot, n % 2, block), 8)
            value.store(target)
        return context.get_dummy_value()

    return types.void(*kinds), generate


@njit(**FAST_JIT_OPTIONS)
def fill_pairs(x, y, z, x2, y2, z2, count, turns, grid, sizes, table, out, plane, image, straight, weights, index, tail):
    """Fill eight planes of (Q, count) in ``out``, flat, each ``plane`` apart; x2, y2, z2 are padded to sixteens.

    Lengths are in wavelengths and ``turns`` is 1 over the wavelength, so that the kernels come out in 1/m."""
    block = sizes[4]
    for begin in range(0, count, block):
        end = min(begin + block, count)
        whole = begin + (end - begin) // 8 * 8
        for i in range(x.size):
            for j in range(begin, end, 16):
                prepare(x[i], y[i], z[i], x2, y2, z2, j, turns, grid, sizes, image, straight, weights, index, j - begin)
            for j in range(begin, whole, 8):
                finish(image, straight, weights, index, j - begin, sizes, table, out, i * count + j, plane)
            if whole < end:
                finish(image, straight, weights, index, whole - begin, sizes, table, tail, 0, 8)
                for part in range(8):
                    for j in range(whole, end):
                        out[part * plane + i * count + j] = tail[8 * part + j - whole]


@njit(**JIT_OPTIONS)
def reach(points, points2):
    """Return lowest and highest sum of heights and the diagonal of the boxes around two sets (3, Q); all NaN if any is."""
    low, high = np.empty((2, 3)), np.empty((2, 3))
    total = 0.0
    for n in range(3):
        for side, values in enumerate((points, points2)):
            least = most = values[n, 0]
            for q in range(values.shape[1]):
                v = values[n, q]
                total += v
                least, most = min(least, v), max(most, v)
            low[side, n], high[side, n] = least, most
    if not np.isfinite(total):
        return np.nan, np.nan, np.nan
    across = max(high[0, 0] - low[1, 0], high[1, 0] - low[0, 0])
    along = max(high[0, 1] - low[1, 1], high[1, 1] - low[0, 1])
    return low[0, 2] + low[1, 2], high[0, 2] + high[1, 2], math.hypot(across, along)
