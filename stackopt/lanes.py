"""The inner steps of the compiled code as vector instructions: four spectral lines at a time.

Lines are kept in blocks (`stackopt.blocks`), each a handful of vector loads. Written as vector
code because the compiler does not find it by itself: measured, rows of 24 lines run twice as fast as in a plain loop.

All arrays are flat, contiguous and of float64; offsets count numbers, not blocks. Nothing is checked.
"""

from __future__ import annotations

from typing import Any

from llvmlite import ir
from numba import types
from numba.extending import intrinsic

from stackopt.blocks import LANES

_VECTOR = ir.VectorType(ir.DoubleType(), LANES)
_FLAGS = ("contract", "reassoc", "nsz")
_Value = Any
_Pair = tuple[_Value, _Value]


class _Block:
    """Loads and stores the planes of a block."""

    def __init__(self, context: Any, builder: Any, array_type: Any, array: Any, offset: Any) -> None:
        self.builder, self.offset = builder, offset
        self.data = context.make_array(array_type)(context, builder, array).data

    def _pointer(self, plane: int) -> _Value:
        place = self.builder.add(self.offset, ir.Constant(ir.IntType(64), plane * LANES))
        return self.builder.bitcast(self.builder.gep(self.data, [place]), _VECTOR.as_pointer())

    def load(self, number: int) -> _Pair:
        parts = [self.builder.load(self._pointer(2 * number + part)) for part in (0, 1)]
        for part in parts:
            part.align = 8
        return parts[0], parts[1]

    def store(self, number: int, value: _Pair) -> None:
        for part in (0, 1):
            self.builder.store(value[part], self._pointer(2 * number + part)).align = 8


def _multiply_add(builder: Any, x: _Pair, y: _Pair, addend: _Pair | None = None) -> _Pair:
    """Complex x*y + addend on vectors."""
    re = builder.fsub(*(builder.fmul(x[i], y[i], flags=_FLAGS) for i in (0, 1)), flags=_FLAGS)
    im = builder.fadd(*(builder.fmul(x[i], y[1 - i], flags=_FLAGS) for i in (0, 1)), flags=_FLAGS)
    if addend is None:
        return re, im
    return builder.fadd(re, addend[0], flags=_FLAGS), builder.fadd(im, addend[1], flags=_FLAGS)


def _multiply_block(typing: Any, sheet: Any, at_sheet: Any, old: Any, at_old: Any, new: Any, at_new: Any) -> Any:
    """(p, q) of ``new`` = (p, q) of ``old`` times the sheet's [[A, B], [C, D]]; old and new may be the same block."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kinds = signature.args
        matrix = _Block(context, builder, kinds[0], args[0], args[1])
        before = _Block(context, builder, kinds[2], args[2], args[3])
        after = _Block(context, builder, kinds[4], args[4], args[5])
        p, q = before.load(0), before.load(1)
        a, b, c, d = (matrix.load(entry) for entry in range(4))
        after.store(0, _multiply_add(builder, q, c, _multiply_add(builder, p, a)))
        after.store(1, _multiply_add(builder, q, d, _multiply_add(builder, p, b)))
        return context.get_dummy_value()

    signature = types.void(sheet, types.int64, old, types.int64, new, types.int64)
    return signature, generate


def _accumulate_block(typing: Any, ending: Any, at_ending: Any, state: Any, at_state: Any, total: Any) -> Any:
    """Add w/(p + q e) of every line of a block to the lanes of ``total``."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kinds = signature.args
        end = _Block(context, builder, kinds[0], args[0], args[1])
        row = _Block(context, builder, kinds[2], args[2], args[3])
        sums = _Block(context, builder, kinds[4], args[4], ir.Constant(ir.IntType(64), 0))
        weight, ratio = end.load(0), end.load(1)
        inverse = _inverse(builder, _multiply_add(builder, row.load(1), ratio, row.load(0)))
        sums.store(0, _multiply_add(builder, weight, inverse, sums.load(0)))
        return context.get_dummy_value()

    return types.void(ending, types.int64, state, types.int64, total), generate


def _close_block(typing: Any, closing: Any, at_closing: Any, state: Any, at_state: Any, total: Any) -> Any:
    """Add 1/(p alpha + q beta) of every line of a block to the lanes of ``total``."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kinds = signature.args
        sheet = _Block(context, builder, kinds[0], args[0], args[1])
        row = _Block(context, builder, kinds[2], args[2], args[3])
        sums = _Block(context, builder, kinds[4], args[4], ir.Constant(ir.IntType(64), 0))
        z = _multiply_add(builder, row.load(1), sheet.load(1), _multiply_add(builder, row.load(0), sheet.load(0)))
        inverse = _inverse(builder, z)
        before = sums.load(0)
        sums.store(0, tuple(builder.fadd(before[i], inverse[i], flags=_FLAGS) for i in (0, 1)))
        return context.get_dummy_value()

    return types.void(closing, types.int64, state, types.int64, total), generate


def _inverse(builder: Any, z: _Pair) -> _Pair:
    """1/z on vectors."""
    size = builder.fadd(*(builder.fmul(part, part, flags=_FLAGS) for part in z), flags=_FLAGS)
    inverse = builder.fdiv(ir.Constant(_VECTOR, [1.0] * LANES), size)
    return builder.fmul(z[0], inverse), builder.fneg(builder.fmul(z[1], inverse))


multiply_block: Any = intrinsic(_multiply_block)
accumulate_block: Any = intrinsic(_accumulate_block)
close_block: Any = intrinsic(_close_block)
