"""Metropolis decisions for many spins at once, in lanes.

Random numbers are the splitmix64 words of ``draws``, so that a stream gives the same words here and there.
"""

from __future__ import annotations

import math
from typing import Any

from llvmlite import ir
from numba import types
from numba.core.errors import TypingError

from patchwalk.subsolvers.draws import GOLDEN
from patchwalk.subsolvers.lanes_bits import RowOfLanes, declared, everywhere, instruction, lanes_in
from patchwalk.subsolvers.neighbours import TIE_CHANCE

POWER_OF_TWO = (
    1.0000000005541776, 0.6931472057375441, 0.24022646890574934, 0.05550328776356032, 0.009618488961281695,
    0.0013399931467670911, 0.00015345811473908133,
)  # fmt: skip
"""A polynomial that is 2^r for |r| <= 1/2, relative error 2e-9 (least largest error, computed here)."""

LOG2_E = math.log2(math.e)

HOPELESS = -58.0
"""2^-58 lies below every random number drawn here, the least of which is 2^-33."""


def _mixed(builder: Any, row: RowOfLanes, z: Any) -> Any:
    """``draws.mix`` in every lane."""
    for shift, factor in ((30, 0xBF58476D1CE4E5B9), (27, 0x94D049BB133111EB), (31, 1)):
        z = builder.xor(z, builder.lshr(z, row.constant(shift)))
        z = builder.mul(z, row.constant(factor)) if factor != 1 else z
    return z


@instruction
def next_states(_typing: Any, states: Any) -> Any:
    """The states (uint64) of as many streams after one more draw from each."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.add(args[0], states.constant(int(GOLDEN)))

    return states(states), generate


@instruction
def words_of(_typing: Any, states: Any) -> Any:
    """The random words (uint64) that belong to the states of as many streams."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return _mixed(builder, states, args[0])

    return states(states), generate


@instruction
def lower_half(_typing: Any, words: Any) -> Any:
    """The lower 32 bits of every word."""
    row = RowOfLanes(types.uint32, words.width)

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.trunc(args[0], row.llvm)

    return row(words), generate


@instruction
def upper_half(_typing: Any, words: Any) -> Any:
    """Words whose lower half is the upper half of the given ones."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.lshr(args[0], words.constant(32))

    return words(words), generate


@instruction
def draws_after(_typing: Any, bits: Any, _state: Any) -> Any:
    """32 random bits (uint32) for each bit of ``bits``: both halves of the words that follow this state of a stream."""
    width = lanes_in(bits)
    row, words = RowOfLanes(types.uint32, width), RowOfLanes(types.uint64, width // 2)
    steps = [(lane + 1) * int(GOLDEN) % 2**64 for lane in range(width // 2)]

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        states = builder.add(everywhere(builder, words, args[1]), words.constant(steps))
        return builder.bitcast(_mixed(builder, words, states), row.llvm)

    return row(bits, types.uint64), generate


def _fused(builder: Any, row: RowOfLanes, operands: list[Any]) -> Any:
    return builder.call(declared(builder, f"llvm.fma.v{row.width}f32", row.llvm, [row.llvm] * 3), operands)


def _two_to_the(builder: Any, row: RowOfLanes, power: Any) -> Any:
    """2^power in float32 lanes, for powers from -126 to 127."""
    rounding = declared(builder, f"llvm.rint.v{row.width}f32", row.llvm, [row.llvm])
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


@instruction
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


def coldness_at(temperature: float) -> float:
    """What :func:`flips_that_happen` wants to know about the temperature."""
    return -LOG2_E / float(temperature) if temperature > 0.0 else -math.inf
