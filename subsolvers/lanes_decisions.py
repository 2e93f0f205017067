"""Metropolis decisions for many spins at once: lanes of numbers, with one bit per lane for the spins.

A machine word with one bit per lane says how many lanes there are: uint16 for 16, uint32 for 32. Its set bits are
the spins that are -1, or the flips that happen. Lanes of numbers are LLVM vectors that a kernel holds in registers;
where the processor has mask registers, taking a number off those lanes whose spin is -1 is one instruction.

Random numbers are the splitmix64 words of ``draws``, so that a stream gives the same words here and there.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, cast

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.core.errors import TypingError
from numba.extending import intrinsic, models, register_model

from patchwalk.subsolvers.draws import GOLDEN
from patchwalk.subsolvers.neighbours import TIE_CHANCE

Lanes = Any
"""What lanes are to the type checker."""

SCALARS = {
    types.int8: ir.IntType(8),
    types.float32: ir.FloatType(),
    types.float64: ir.DoubleType(),
    types.uint32: ir.IntType(32),
    types.uint64: ir.IntType(64),
}
"""The numbers that lanes can hold."""

POWER_OF_TWO = (
    1.0000000005541776, 0.6931472057375441, 0.24022646890574934, 0.05550328776356032, 0.009618488961281695,
    0.0013399931467670911, 0.00015345811473908133,
)  # fmt: skip
"""A polynomial that is 2^r for |r| <= 1/2, relative error 2e-9 (least largest error, computed here)."""

LOG2_E = math.log2(math.e)

HOPELESS = -58.0
"""2^-58 lies below every random number drawn here, the least of which is 2^-33."""


class RowOfLanes(types.Type):
    """The numba type of ``width`` lanes of one kind of number."""

    def __init__(self, element: Any, width: int) -> None:
        self.element = element
        self.width = width
        super().__init__(name=f"RowOfLanes({element}, {width})")

    @property
    def llvm(self) -> ir.VectorType:
        """The type in machine code."""
        return ir.VectorType(SCALARS[self.element], self.width)

    def constant(self, value: float | int | list[int]) -> ir.Constant:
        """Lanes that all hold the same number, or those of a list."""
        return ir.Constant(self.llvm, value if isinstance(value, list) else [value] * self.width)


@register_model(RowOfLanes)
class _RowModel(models.PrimitiveModel):
    def __init__(self, manager: Any, lanes: RowOfLanes) -> None:
        super().__init__(manager, lanes, lanes.llvm)  # type: ignore[no-untyped-call, unused-ignore]


def _instruction(typing: Callable[..., Any]) -> Callable[..., Any]:
    """numba's intrinsic, in a form that a type checker accepts: callers leave out the first argument."""
    return cast(Callable[..., Any], intrinsic(typing))


def _width(bits: Any) -> int:
    if bits not in (types.uint16, types.uint32, types.uint64):
        raise TypingError(f"one bit per lane comes as uint16, uint32 or uint64; this is {bits}")
    return int(bits.bitwidth)


def _mask(builder: Any, bits: Any, width: int) -> Any:
    return builder.bitcast(bits, ir.VectorType(ir.IntType(1), width))


def _declared(builder: Any, name: str, result: Any, operands: list[Any]) -> Any:
    insert: Any = cgutils.get_or_insert_function
    return insert(builder.module, ir.FunctionType(result, operands), name)


def _everywhere(builder: Any, row: RowOfLanes, value: Any) -> Any:
    nothing = ir.Constant(row.llvm, ir.Undefined)
    first = builder.insert_element(nothing, value, ir.Constant(ir.IntType(32), 0))
    order = ir.Constant(ir.VectorType(ir.IntType(32), row.width), [0] * row.width)
    return builder.shuffle_vector(first, nothing, order)


def _address(context: Any, builder: Any, array_type: Any, array: Any, index: Any, row: RowOfLanes) -> Any:
    data = context.make_array(array_type)(context, builder, array).data
    return builder.bitcast(builder.gep(data, [index]), row.llvm.as_pointer())


@_instruction
def spread(_typing: Any, bits: Any, value: Any) -> Any:
    """Lanes that all hold this number, one for each bit of ``bits``."""
    row = RowOfLanes(value, _width(bits))

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return _everywhere(builder, row, args[1])

    return row(bits, value), generate


@_instruction
def load_lanes(_typing: Any, bits: Any, array: Any, _index: Any) -> Any:
    """The lanes that begin at array[index], one for each bit of ``bits``. Bounds are not checked."""
    row = RowOfLanes(array.dtype, _width(bits))

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        address = _address(context, builder, signature.args[1], args[1], args[2], row)
        return builder.load(address, align=row.element.bitwidth // 8)

    return row(bits, array, types.intp), generate


@_instruction
def store_lanes(_typing: Any, array: Any, _index: Any, row: Any) -> Any:
    """Write lanes to the array, beginning at array[index]. Bounds are not checked."""
    if array.dtype != row.element:
        raise TypingError(f"{row} does not fit into {array}")

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        address = _address(context, builder, signature.args[0], args[0], args[1], row)
        builder.store(args[2], address, align=row.element.bitwidth // 8)
        return context.get_dummy_value()

    return types.void(array, types.intp, row), generate


@_instruction
def less_where(_typing: Any, row: Any, bits: Any, _value: Any) -> Any:
    """The lanes, less this number wherever the bit is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        less = builder.fsub(args[0], _everywhere(builder, row, args[2]))
        return builder.select(_mask(builder, args[1], row.width), less, args[0])

    return row(row, bits, row.element), generate


@_instruction
def against_bits(_typing: Any, row: Any, bits: Any) -> Any:
    """Minus spin times number in every lane; the spin is -1 wherever the bit is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.select(_mask(builder, args[1], row.width), args[0], builder.fneg(args[0]))

    return row(row, bits), generate


@_instruction
def with_spins(_typing: Any, row: Any, bits: Any, _value: Any) -> Any:
    """The lanes plus this number times the lane's spin, -1 wherever the bit is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        value = _everywhere(builder, row, args[2])
        down, up = builder.fsub(args[0], value), builder.fadd(args[0], value)
        return builder.select(_mask(builder, args[1], row.width), down, up)

    return row(row, bits, row.element), generate


@_instruction
def against_spins(_typing: Any, row: Any, spins: Any) -> Any:
    """Minus spin times number in every lane; ``spins`` (int8) are +1 and -1."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        down = builder.icmp_signed("<", args[1], spins.constant(0))
        return builder.select(down, args[0], builder.fneg(args[0]))

    return row(row, spins), generate


@_instruction
def add_where(_typing: Any, row: Any, bits: Any, addend: Any) -> Any:
    """The lanes, plus those of ``addend`` wherever the bit is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        more = builder.fadd(args[0], args[2])
        return builder.select(_mask(builder, args[1], row.width), more, args[0])

    return row(row, bits, addend), generate


@_instruction
def add_lanes(_typing: Any, row: Any, addend: Any) -> Any:
    """The sum, lane by lane, in the precision of the first."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        more = args[1] if row == addend else builder.fpext(args[1], row.llvm)
        return builder.fadd(args[0], more)

    return row(row, addend), generate


def _mixed(builder: Any, row: RowOfLanes, z: Any) -> Any:
    """``draws.mix`` in every lane."""
    for shift, factor in ((30, 0xBF58476D1CE4E5B9), (27, 0x94D049BB133111EB), (31, 1)):
        z = builder.xor(z, builder.lshr(z, row.constant(shift)))
        z = builder.mul(z, row.constant(factor)) if factor != 1 else z
    return z


@_instruction
def next_states(_typing: Any, states: Any) -> Any:
    """The states (uint64) of as many streams after one more draw from each."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.add(args[0], states.constant(int(GOLDEN)))

    return states(states), generate


@_instruction
def words_of(_typing: Any, states: Any) -> Any:
    """The random words (uint64) that belong to the states of as many streams."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return _mixed(builder, states, args[0])

    return states(states), generate


@_instruction
def lower_half(_typing: Any, words: Any) -> Any:
    """The lower 32 bits of every word."""
    row = RowOfLanes(types.uint32, words.width)

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.trunc(args[0], row.llvm)

    return row(words), generate


@_instruction
def upper_half(_typing: Any, words: Any) -> Any:
    """Words whose lower half is the upper half of the given ones."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.lshr(args[0], words.constant(32))

    return words(words), generate


@_instruction
def draws_after(_typing: Any, bits: Any, _state: Any) -> Any:
    """32 random bits (uint32) for each bit of ``bits``: both halves of the words that follow this state of a stream."""
    width = _width(bits)
    row, words = RowOfLanes(types.uint32, width), RowOfLanes(types.uint64, width // 2)
    steps = [(lane + 1) * int(GOLDEN) % 2**64 for lane in range(width // 2)]

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        states = builder.add(_everywhere(builder, words, args[1]), words.constant(steps))
        return builder.bitcast(_mixed(builder, words, states), row.llvm)

    return row(bits, types.uint64), generate


def _fused(builder: Any, row: RowOfLanes, operands: list[Any]) -> Any:
    return builder.call(_declared(builder, f"llvm.fma.v{row.width}f32", row.llvm, [row.llvm] * 3), operands)


def _two_to_the(builder: Any, row: RowOfLanes, power: Any) -> Any:
    """2^power in float32 lanes, for powers from -126 to 127."""
    rounding = _declared(builder, f"llvm.rint.v{row.width}f32", row.llvm, [row.llvm])
    whole = builder.call(rounding, [power])
    rest = builder.fsub(power, whole)
    value = row.constant(POWER_OF_TWO[-1])
    for coefficient in reversed(POWER_OF_TWO[:-1]):
        value = _fused(builder, row, [value, rest, row.constant(coefficient)])
    integers = RowOfLanes(types.uint32, row.width)
    exponent = builder.shl(builder.fptosi(whole, integers.llvm), integers.constant(23))
    return builder.bitcast(builder.add(builder.bitcast(value, integers.llvm), exponent), row.llvm)


def _clamped(builder: Any, row: RowOfLanes, value: Any, low: float, high: float) -> Any:
    below, above = row.constant(low), row.constant(high)
    value = builder.select(builder.fcmp_ordered("<", value, above), value, above)
    return builder.select(builder.fcmp_ordered(">", value, below), value, below)


@_instruction
def flips_that_happen(_typing: Any, bits: Any, rises: Any, coldness: Any, draws: Any) -> Any:
    """One bit per lane: whether a flip that raises the energy by ``rises`` happens, given 32 random bits (uint32).

    ``coldness`` is -log2(e) over the temperature, minus infinity at temperature zero. The chance is exp(-rise/T),
    formed in float32 (relative error below 2e-6); a fall always happens, a rise of exactly zero with ``TIE_CHANCE``.
    """
    if rises != coldness or draws.element != types.uint32:
        raise TypingError(
            f"rises and coldness are of one kind, draws are uint32; these are {rises}, {coldness}, {draws}"
        )
    row = RowOfLanes(types.float32, rises.width)

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        power = builder.fmul(args[1], args[2])
        if rises.element != types.float32:
            power = builder.fptrunc(power, row.llvm)
        chance = _two_to_the(builder, row, _clamped(builder, row, power, HOPELESS, 1.0))
        level = builder.fcmp_ordered("==", args[1], rises.constant(0.0))
        chance = builder.select(level, row.constant(TIE_CHANCE), chance)
        # 2^-24 less, so that rounding never takes a draw to 1 and every fall happens
        step, half_a_step = row.constant(2.0**-32 - 2.0**-56), row.constant(2.0**-33)
        unit = _fused(builder, row, [builder.uitofp(args[3], row.llvm), step, half_a_step])
        return builder.bitcast(builder.fcmp_ordered("<", unit, chance), ir.IntType(rises.width))

    return bits(bits, rises, coldness, draws), generate


@_instruction
def prefetch_at(_typing: Any, array: Any, _index: Any) -> Any:
    """Ask for the cache line of array[index] ahead of its use."""
    byte, number = ir.IntType(8).as_pointer(), ir.IntType(32)
    to_read_in_all_caches = [ir.Constant(number, flag) for flag in (0, 3, 1)]

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        function = _declared(builder, "llvm.prefetch.p0", ir.VoidType(), [byte, number, number, number])
        data = context.make_array(signature.args[0])(context, builder, args[0]).data
        place = builder.bitcast(builder.gep(data, [args[1]]), byte)
        builder.call(function, [place, *to_read_in_all_caches])
        return context.get_dummy_value()

    return types.void(array, types.intp), generate


@_instruction
def lowest_bit(_typing: Any, bits: Any) -> Any:
    """The number of the lowest set bit."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        word = builder.zext(args[0], ir.IntType(64)) if bits.bitwidth < 64 else args[0]
        return builder.cttz(word, ir.Constant(ir.IntType(1), 1))

    return types.uint64(bits), generate


def coldness_at(temperature: float) -> float:
    """What :func:`flips_that_happen` wants to know about the temperature."""
    return -LOG2_E / float(temperature) if temperature > 0.0 else -math.inf
