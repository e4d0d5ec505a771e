"""Vector code spelled out: eight samples at a time, for loops that the compiler does not vectorise by itself.

A :class:`Lanes` is a value of the compiler's intermediate language on which ordinary arithmetic can be written.  It is general
LLVM code, so that it compiles on any processor; a machine with shorter vectors takes several instructions for one.  Compiled
code that is kept between runs does not notice a change of this module: touch ``fill_numba`` after one.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from llvmlite import ir
from numba.core import cgutils

COUNT = 8
"""Samples worked on at once."""

# Products may be fused and sums reordered, a division may become a product with a reciprocal, as in FAST_JIT_OPTIONS.
_FLAGS = ("contract", "reassoc", "nsz", "arcp", "afn")
_INT32 = ir.IntType(32)


class Lanes:
    """Some numbers of one floating-point type, side by side.

    Parameters
    ----------
    builder : llvmlite.ir.IRBuilder
        Where instructions are put.
    value : llvmlite.ir.Value
        A vector.
    """

    def __init__(self, builder: Any, value: Any) -> None:
        self.builder, self.value = builder, value

    @classmethod
    def same(cls, builder: Any, scalar: Any, count: int = COUNT) -> Lanes:
        """Return one scalar in all lanes."""
        kind = ir.VectorType(scalar.type, count)
        first = builder.insert_element(ir.Constant(kind, ir.Undefined), scalar, ir.Constant(_INT32, 0))
        return cls(builder, first).pick([0] * count)

    @classmethod
    def load(cls, builder: Any, pointer: Any, count: int = COUNT) -> Lanes:
        """Return numbers that lie one after another in memory, aligned to one of them."""
        kind = ir.VectorType(pointer.type.pointee, count)
        loaded = builder.load(builder.bitcast(pointer, kind.as_pointer()))
        loaded.align = size_of(pointer.type.pointee)
        return cls(builder, loaded)

    def store(self, pointer: Any) -> None:
        """Write the numbers one after another."""
        target = self.builder.bitcast(pointer, self.value.type.as_pointer())
        self.builder.store(self.value, target).align = size_of(self.kind)

    @property
    def kind(self) -> Any:
        """Type of one number."""
        return self.value.type.element

    @property
    def count(self) -> int:
        """How many."""
        return int(self.value.type.count)

    def constant(self, number: float) -> Any:
        """Return a number in all lanes."""
        return ir.Constant(self.value.type, [ir.Constant(self.kind, number)] * self.count)

    def _operand(self, other: Lanes | float) -> Any:
        return other.value if isinstance(other, Lanes) else self.constant(other)

    def __add__(self, other: Lanes | float) -> Lanes:
        return Lanes(self.builder, self.builder.fadd(self.value, self._operand(other), flags=_FLAGS))

    def __sub__(self, other: Lanes | float) -> Lanes:
        return Lanes(self.builder, self.builder.fsub(self.value, self._operand(other), flags=_FLAGS))

    def __rsub__(self, other: float) -> Lanes:
        return Lanes(self.builder, self.builder.fsub(self.constant(other), self.value, flags=_FLAGS))

    def __mul__(self, other: Lanes | float) -> Lanes:
        return Lanes(self.builder, self.builder.fmul(self.value, self._operand(other), flags=_FLAGS))

    __rmul__ = __mul__
    __radd__ = __add__

    def __rtruediv__(self, other: float) -> Lanes:
        return Lanes(self.builder, self.builder.fdiv(self.constant(other), self.value, flags=_FLAGS))

    def call(self, name: str) -> Lanes:
        """Return a function of one argument that the compiler knows: ``sqrt``, ``rint``, ``floor``."""
        kind = ir.FunctionType(self.value.type, [self.value.type])
        full_name = f"llvm.{name}.v{self.count}f{8 * size_of(self.kind)}"
        function = cgutils.get_or_insert_function(self.builder.module, kind, full_name)
        return Lanes(self.builder, self.builder.call(function, [self.value], fastmath=_FLAGS))

    def as_kind(self, kind: Any) -> Lanes:
        """Return the numbers in another floating-point type."""
        if kind == self.kind:
            return self
        target = ir.VectorType(kind, self.count)
        convert = self.builder.fptrunc if size_of(kind) < size_of(self.kind) else self.builder.fpext
        return Lanes(self.builder, convert(self.value, target))

    def whole_and_rest(self, largest: Any) -> tuple[Any, Lanes]:
        """Return whole parts up to ``largest`` (an int32 scalar) as int32 lanes, and what is left; numbers above -1 only."""
        builder = self.builder
        limit = Lanes.same(builder, largest, self.count).value
        whole = builder.fptosi(self.value, limit.type)
        whole = builder.select(builder.icmp_signed("<", whole, limit), whole, limit)
        return whole, self - Lanes(builder, builder.sitofp(whole, self.value.type))

    def pick(self, which: Sequence[int], other: Lanes | None = None) -> Lanes:
        """Return lanes of this value, or of this followed by another, in the order of ``which``."""
        second = ir.Constant(self.value.type, ir.Undefined) if other is None else other.value
        mask = ir.Constant(ir.VectorType(_INT32, len(which)), [ir.Constant(_INT32, int(n)) for n in which])
        return Lanes(self.builder, self.builder.shuffle_vector(self.value, second, mask))


def size_of(kind: Any) -> int:
    """Return the size of a floating-point type or int32 [bytes]."""
    return 8 if isinstance(kind, ir.DoubleType) else 4


def transpose(rows: Sequence[Lanes]) -> list[Lanes]:
    """Return the eight columns of eight rows of eight: pairs, then fours, then halves are interleaved."""
    pairs = []
    for a, b in zip(rows[0::2], rows[1::2], strict=True):
        pairs += [a.pick([0, 8, 1, 9, 4, 12, 5, 13], b), a.pick([2, 10, 3, 11, 6, 14, 7, 15], b)]
    fours = []
    for start in (0, 4):
        for a, b in ((pairs[start], pairs[start + 2]), (pairs[start + 1], pairs[start + 3])):
            fours += [a.pick([0, 1, 8, 9, 4, 5, 12, 13], b), a.pick([2, 3, 10, 11, 6, 7, 14, 15], b)]
    low = [a.pick([0, 1, 2, 3, 8, 9, 10, 11], b) for a, b in zip(fours[:4], fours[4:], strict=True)]
    high = [a.pick([4, 5, 6, 7, 12, 13, 14, 15], b) for a, b in zip(fours[:4], fours[4:], strict=True)]
    return low + high
