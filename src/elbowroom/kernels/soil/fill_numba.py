"""Compiled fill over real ground: the direct kernel and a bicubic table look-up, eight pairs of points at a time.

What keeps the compiler from vectorising such a loop is the look-up: every pair reads another place of the table, and gathering
128 numbers for each of eight pairs costs more than all the rest.  Here the eight numbers of a table node (four complex
kernels) lie side by side and are interpolated together, one pair after another; then eight pairs are transposed.  The steps
before and after work on eight pairs at a time.  Reciprocal roots start from single precision and one step of Newton's.
"""

import math

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic

from elbowroom.kernels.accelerate import FAST_JIT_OPTIONS
from elbowroom.kernels.points_numba import C0, C1, C2, C3, C4, C5, S0, S1, S2, S3, S4, S5
from elbowroom.kernels.soil.lanes import COUNT, Lanes, transpose

_NEIGHBOURS = 4


def _reciprocal_root(square, kind):
    """Return 1/sqrt to about 1e-14: from single precision, once by Newton's iteration."""
    short = 1.0 / square.as_kind(ir.FloatType()).call("sqrt")
    y = short.as_kind(kind)
    return y * (1.5 - (0.5 * square) * (y * y))


def _wave(square, turns_per_metre, kind):
    """Return real and imaginary part of exp(-jkR)/R from R^2, as ``points_numba`` does."""
    inverse = _reciprocal_root(square, kind)
    turns = square * inverse * turns_per_metre
    rest = turns - turns.call("rint")
    v = rest * rest
    s = rest * (S0 + v * (S1 + v * (S2 + v * (S3 + v * (S4 + v * S5)))))
    c = C0 + v * (C1 + v * (C2 + v * (C3 + v * (C4 + v * C5))))
    twice = 2.0 * inverse * s
    return inverse - twice * s, -1.0 * (twice * c)


def _spline_weights(t):
    s = 1.0 - t
    return [
        (s * s) * s * (1.0 / 6.0),
        2.0 / 3.0 - t * t * (1.0 - 0.5 * t),
        2.0 / 3.0 - s * s * (1.0 - 0.5 * s),
        (t * t) * t * (1.0 / 6.0),
    ]


def _make_lanes(direct):
    """Return the intrinsic for eight pairs, with or without the direct kernel."""

    @intrinsic
    def eight_pairs(typing_context, x, y, z, x2, y2, z2, start, grid, sizes, table, out, offset, plane):
        arguments = (x, y, z, x2, y2, z2, start, grid, sizes, table, out, offset, plane)
        signature = types.void(*arguments)

        def generate(context, builder, signature, values):
            x, y, z, x2, y2, z2, start, grid, sizes, table, out, offset, plane = values
            integer = start.type

            def data(position):
                kind = arguments[position]
                return context.make_array(kind)(context, builder, values[position]).data

            def number(pointer, n):
                return builder.load(builder.gep(pointer, [ir.Constant(integer, n)]))

            def same(scalar, count=COUNT):
                return Lanes.same(builder, scalar, count)

            double = ir.DoubleType()
            kind = context.get_value_type(arguments[9].dtype)
            numbers, whole, nodes = data(7), data(8), data(9)
            turns_per_metre, rho_scale, rho_nodes, z_scale, z_nodes, z_start = (same(number(numbers, n)) for n in range(6))
            dx, dy = (same(a) - Lanes.load(builder, builder.gep(data(n), [start])) for a, n in ((x, 3), (y, 4)))
            height = Lanes.load(builder, builder.gep(data(5), [start]))
            dz, top = same(z) - height, same(z) + height
            flat = dx * dx + dy * dy
            real2, imag2 = _wave(flat + top * top, turns_per_metre, double)
            # Coordinates in the table, in its own precision; 1e-30 keeps points above one another from dividing by zero.
            short, up = (flat + 1e-30).as_kind(kind), top.as_kind(kind)
            rho = short.call("sqrt")
            a, b = rho_scale.as_kind(kind), z_scale.as_kind(kind)
            low, left = up + b, rho + a
            both = 1.0 / (low * left)
            along = rho * low * both * rho_nodes.as_kind(kind)
            upwards = up * left * both * z_nodes.as_kind(kind) - z_start.as_kind(kind)
            last_rho, last_z, stride = number(whole, 0), number(whole, 1), number(whole, 2)
            i, s = along.whole_and_rest(last_rho)
            j, t = upwards.whole_and_rest(last_z)
            first = builder.add(builder.mul(i, same(stride).value), builder.shl(j, ir.Constant(j.type, [3] * COUNT)))
            weights, heights = _spline_weights(s), _spline_weights(t)
            row = builder.sext(stride, integer)
            rows = []
            for pair in range(COUNT):
                position = builder.sext(builder.extract_element(first, ir.Constant(ir.IntType(32), pair)), integer)
                low_half = high_half = None
                for n in range(_NEIGHBOURS):
                    node = builder.gep(nodes, [position])
                    weight = weights[n].pick([pair] * 2 * COUNT)
                    lower = Lanes.load(builder, node, 2 * COUNT) * weight
                    upper = Lanes.load(builder, builder.gep(node, [ir.Constant(integer, 2 * COUNT)]), 2 * COUNT) * weight
                    low_half = lower if low_half is None else low_half + lower
                    high_half = upper if high_half is None else high_half + upper
                    position = builder.add(position, row)
                two = [pair] * COUNT + [pair + COUNT] * COUNT
                total = low_half * heights[0].pick(two, heights[1]) + high_half * heights[2].pick(two, heights[3])
                rows.append(total.pick(range(COUNT)) + total.pick(range(COUNT, 2 * COUNT)))
            columns = [column.as_kind(double) for column in transpose(rows)]
            results = []
            for n in range(4):
                p, q = columns[2 * n], columns[2 * n + 1]
                results += [real2 * p - imag2 * q, real2 * q + imag2 * p]
            if direct:
                real, imag = _wave(flat + dz * dz, turns_per_metre, double)
                results[:6] = [value + (real, imag)[n % 2] for n, value in enumerate(results[:6])]
            target = builder.gep(data(10), [offset])
            for value in results:
                value.as_kind(target.type.pointee).store(target)
                target = builder.gep(target, [plane])
            return context.get_dummy_value()

        return signature, generate

    return eight_pairs


_eight_with_direct = _make_lanes(True)
_eight_without = _make_lanes(False)


def _make_fill(eight_pairs):
    @njit(**FAST_JIT_OPTIONS)
    def fill(x, y, z, x2, y2, z2, count, grid, sizes, table, out, plane, tail):
        """Fill eight planes of (Q, count) in ``out``, flat, each ``plane`` apart; x2, y2, z2 are padded to eights."""
        whole = count // 8 * 8
        for i in range(x.size):
            for j in range(0, whole, 8):
                eight_pairs(x[i], y[i], z[i], x2, y2, z2, j, grid, sizes, table, out, i * count + j, plane)
            if whole < count:
                eight_pairs(x[i], y[i], z[i], x2, y2, z2, whole, grid, sizes, table, tail, 0, 8)
                for part in range(8):
                    for j in range(whole, count):
                        out[part * plane + i * count + j] = tail[8 * part + j - whole]

    return fill


fill_with_direct = _make_fill(_eight_with_direct)
fill_without = _make_fill(_eight_without)
