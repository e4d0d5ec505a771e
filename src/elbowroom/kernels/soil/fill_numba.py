"""Compiled fill over real ground: the direct kernel and a bicubic table look-up, eight pairs of points at a time.

What keeps the compiler from vectorising such a loop is the look-up: every pair reads another place of the table, and gathering
128 numbers for each of eight pairs costs more than all the rest.  Here the eight numbers of a table node (four complex
kernels) lie side by side and are interpolated together, one pair after another; then eight pairs are transposed.  The steps
before and after work on eight pairs at a time.  Reciprocal roots start from single precision and one step of Newton's.
"""

from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic

from elbowroom.kernels.accelerate import FAST_JIT_OPTIONS
from elbowroom.kernels.points_numba import C0, C1, C2, C3, C4, C5, S0, S1, S2, S3, S4, S5
from elbowroom.kernels.soil.lanes import Lanes, transpose

_NEIGHBOURS = 4
_AT_ONCE = 16
"""Pairs prepared at once: as many as single precision fits; double precision works in two halves."""

_FLOAT, _DOUBLE = ir.FloatType(), ir.DoubleType()


def _inverse_and_rest(square, turns_per_metre):
    """Return 1/R, and what is left of R in wavelengths after whole turns, from R^2 in double precision."""
    short = 1.0 / square.as_kind(_FLOAT).call("sqrt")
    y = short.as_kind(_DOUBLE)
    inverse = y * (1.5 - (0.5 * square) * (y * y))
    turns = square * inverse * turns_per_metre
    return inverse, turns - turns.call("rint")


def _wave(inverse, rest):
    """Return real and imaginary part of exp(-jkR)/R, by the polynomials of ``points_numba``."""
    v = rest * rest
    s = rest * (S0 + v * (S1 + v * (S2 + v * (S3 + v * (S4 + v * S5)))))
    c = C0 + v * (C1 + v * (C2 + v * (C3 + v * (C4 + v * C5))))
    twice = 2.0 * inverse * s
    return inverse - twice * s, -1.0 * (twice * c)


def _spline_weights(t):
    s = 1.0 - t
    half = 0.5 * t
    return [
        (s * s) * (s * (1.0 / 6.0)),
        2.0 / 3.0 - (t * t) * (1.0 - half),
        2.0 / 3.0 - (s * s) * (0.5 + half),
        (t * t) * (t * (1.0 / 6.0)),
    ]


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


def _make_prepare(direct):
    @intrinsic
    def prepare(typing_context, x, y, z, x2, y2, z2, start, numbers, sizes, image, straight, weights, index, slot):
        """Work out what pairs from ``start`` on need and keep it from ``slot`` on: waves, spline weights, places in the table.

        ``image`` and ``straight`` (2, B): real and imaginary part of exp(-jkR)/R of the two paths; ``weights``: (4, B) along
        rho, then (B, 4) along Z; ``index`` (B); B stands last in ``sizes``.
        """
        kinds = (x, y, z, x2, y2, z2, start, numbers, sizes, image, straight, weights, index, slot)

        def generate(context, builder, signature, values):
            access = _Access(context, builder, kinds, values)
            start, slot = values[6], values[13]
            kind = context.get_value_type(weights.dtype)

            def same(scalar, like):
                return Lanes.same(builder, scalar, _AT_ONCE).as_kind(like)

            def number(n, like):
                return same(builder.load(access.at(7, access.whole(n))), like)

            last_rho, last_z, stride, odd, block = (builder.load(access.at(8, access.whole(n))) for n in range(5))
            block = builder.sext(block, start.type)
            second = [Lanes.load(builder, access.at(3 + n, start), _AT_ONCE) for n in range(3)]
            dx, dy = (same(values[n], _DOUBLE) - second[n] for n in (0, 1))
            own = same(values[2], _DOUBLE)
            top = own + second[2]
            flat = dx * dx + dy * dy
            turns = number(0, _DOUBLE)

            def keep(square, position):
                like = context.get_value_type(kinds[position].dtype)
                for n, value in enumerate(_wave(*(v.as_kind(like) for v in _inverse_and_rest(square, turns)))):
                    value.store(access.part(position, slot, n, block))

            keep(flat + top * top, 9)
            if direct:
                dz = own - second[2]
                keep(flat + dz * dz, 10)
            # Coordinates in the table, in its own precision; 1e-30 keeps points above one another from dividing by zero.
            rho, up = (flat + 1e-30).as_kind(kind).call("sqrt"), top.as_kind(kind)
            low, left = up + number(3, kind), rho + number(1, kind)
            both = 1.0 / (low * left)
            i, s = (rho * low * (both * number(2, kind))).whole_and_rest(last_rho)
            j, t = (up * left * (both * number(4, kind)) - number(5, kind)).whole_and_rest(last_z)

            def whole_lanes(constant):
                return ir.Constant(j.type, [ir.Constant(j.type.element, constant)] * _AT_ONCE)

            parity = builder.and_(j, whole_lanes(1))
            place = builder.mul(i, Lanes.same(builder, stride, _AT_ONCE).value)
            place = builder.add(place, builder.shl(builder.sub(j, parity), whole_lanes(3)))
            place = builder.add(place, builder.mul(parity, Lanes.same(builder, odd, _AT_ONCE).value))
            Lanes(builder, place).store(access.at(12, slot))
            for n, value in enumerate(_spline_weights(s)):
                value.store(access.part(11, slot, n, block))
            a, b, c, d = _spline_weights(t)
            for start_lane in range(0, _AT_ONCE, 4):
                two = [start_lane + n // 2 + _AT_ONCE * (n % 2) for n in range(8)]
                low_two, high_two = a.pick(two, b), c.pick(two, d)
                four = low_two.pick([(n // 4) * 2 + n % 2 + 8 * (n // 2 % 2) for n in range(16)], high_two)
                first = builder.add(slot, access.whole(start_lane))
                four.store(access.at(11, builder.mul(access.whole(4), builder.add(block, first))))
            return context.get_dummy_value()

        return types.void(*kinds), generate

    return prepare


def _make_finish(direct):
    @intrinsic
    def finish(typing_context, image, straight, weights, index, slot, sizes, table, out, offset, plane):
        """Look eight prepared pairs up in the table, and put their kernels into eight planes of ``out``."""
        kinds = (image, straight, weights, index, slot, sizes, table, out, offset, plane)

        def generate(context, builder, signature, values):
            access = _Access(context, builder, kinds, values)
            slot, offset, plane = values[4], values[8], values[9]
            stride, block = (builder.sext(builder.load(access.at(5, access.whole(n))), slot.type) for n in (2, 4))
            rows = []
            for pair in range(8):
                place = builder.add(slot, access.whole(pair))
                position = builder.sext(builder.load(access.at(3, place)), slot.type)
                lower = upper = None
                for n in range(_NEIGHBOURS):
                    weight = Lanes.same(builder, builder.load(access.part(2, place, n, block)), 16)
                    one = Lanes.load(builder, access.at(6, position), 16) * weight
                    two = Lanes.load(builder, access.at(6, builder.add(position, access.whole(16))), 16) * weight
                    lower, upper = (one, two) if lower is None else (lower + one, upper + two)
                    position = builder.add(position, stride)
                four = Lanes.load(builder, access.at(2, builder.mul(access.whole(4), builder.add(block, place))), 4)
                total = lower * four.pick([0] * 8 + [1] * 8) + upper * four.pick([2] * 8 + [3] * 8)
                rows.append(total.pick(range(8)) + total.pick(range(8, 16)))
            real, imag = (Lanes.load(builder, access.part(0, slot, n, block), 8) for n in (0, 1))
            columns = transpose(rows)
            for n in range(8):
                p, q = columns[n - n % 2], columns[n - n % 2 + 1]
                target = access.part(7, offset, n, plane)
                value = (real * p - imag * q if n % 2 == 0 else real * q + imag * p).as_kind(target.type.pointee)
                if direct and n < 6:
                    value += Lanes.load(builder, access.part(1, slot, n % 2, block), 8)
                value.store(target)
            return context.get_dummy_value()

        return types.void(*kinds), generate

    return finish


def _make_fill(direct):
    prepare, finish = _make_prepare(direct), _make_finish(direct)

    @njit(**FAST_JIT_OPTIONS)
    def fill(x, y, z, x2, y2, z2, count, numbers, sizes, table, out, plane, image, straight, weights, index, tail):
        """Fill eight planes of (Q, count) in ``out``, flat, each ``plane`` apart; x2, y2, z2 are padded to sixteens."""
        block = sizes[4]
        for begin in range(0, count, block):
            end = min(begin + block, count)
            whole = begin + (end - begin) // 8 * 8
            for i in range(x.size):
                for j in range(begin, end, 16):
                    prepare(x[i], y[i], z[i], x2, y2, z2, j, numbers, sizes, image, straight, weights, index, j - begin)
                for j in range(begin, whole, 8):
                    finish(image, straight, weights, index, j - begin, sizes, table, out, i * count + j, plane)
                if whole < end:
                    finish(image, straight, weights, index, whole - begin, sizes, table, tail, 0, 8)
                    for part in range(8):
                        for j in range(whole, end):
                            out[part * plane + i * count + j] = tail[8 * part + j - whole]

    return fill


fill_with_direct = _make_fill(True)
fill_without = _make_fill(False)
