"""Lanes with one bit each: numbers of many spins at once, beside a machine word that holds the spins.

A machine word with one bit per lane says how many lanes there are: uint16 for 16, uint32 for 32. Its set bits are
the spins that are -1, or the flips that happen. Lanes of numbers are LLVM vectors that a kernel holds in registers;
where the processor has mask registers, taking a number off those lanes whose spin is -1 is one instruction.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, cast

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.core.errors import TypingError
from numba.extending import intrinsic, models, register_model

SCALARS = {
    types.int8: ir.IntType(8),
    types.float32: ir.FloatType(),
    types.float64: ir.DoubleType(),
    types.uint32: ir.IntType(32),
    types.uint64: ir.IntType(64),
}
"""The numbers that lanes can hold."""


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


def instruction(typing: Callable[..., Any]) -> Callable[..., Any]:
    """numba's intrinsic, in a form that a type checker accepts: callers leave out the first argument."""
    return cast(Callable[..., Any], intrinsic(typing))


def lanes_in(bits: Any) -> int:
    """How many lanes a word stands for; raises ``TypingError`` for what is no such word."""
    if bits not in (types.uint16, types.uint32, types.uint64):
        raise TypingError(f"one bit per lane comes as uint16, uint32 or uint64; this is {bits}")
    return int(bits.bitwidth)


def _mask(builder: Any, bits: Any, width: int) -> Any:
    return builder.bitcast(bits, ir.VectorType(ir.IntType(1), width))


def declared(builder: Any, name: str, result: Any, operands: list[Any]) -> Any:
    """A function of LLVM's, by its name."""
    insert: Any = cgutils.get_or_insert_function
    return insert(builder.module, ir.FunctionType(result, operands), name)


def everywhere(builder: Any, row: RowOfLanes, value: Any) -> Any:
    """A number in all lanes, while machine code is put together."""
    nothing = ir.Constant(row.llvm, ir.Undefined)
    first = builder.insert_element(nothing, value, ir.Constant(ir.IntType(32), 0))
    order = ir.Constant(ir.VectorType(ir.IntType(32), row.width), [0] * row.width)
    return builder.shuffle_vector(first, nothing, order)


def _address(context: Any, builder: Any, array_type: Any, array: Any, index: Any, row: RowOfLanes) -> Any:
    data = context.make_array(array_type)(context, builder, array).data
    return builder.bitcast(builder.gep(data, [index]), row.llvm.as_pointer())


@instruction
def spread(_typing: Any, bits: Any, value: Any) -> Any:
    """Lanes that all hold this number, one for each bit of ``bits``."""
    row = RowOfLanes(value, lanes_in(bits))

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return everywhere(builder, row, args[1])

    return row(bits, value), generate


@instruction
def load_lanes(_typing: Any, bits: Any, array: Any, _index: Any) -> Any:
    """The lanes that begin at array[index], one for each bit of ``bits``. Bounds are not checked."""
    if array.dtype not in SCALARS or array.layout != "C":
        raise TypingError(f"lanes live in contiguous arrays of {', '.join(map(str, SCALARS))}; this is {array}")
    row = RowOfLanes(array.dtype, lanes_in(bits))

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        address = _address(context, builder, signature.args[1], args[1], args[2], row)
        return builder.load(address, align=row.element.bitwidth // 8)

    return row(bits, array, types.intp), generate


@instruction
def store_lanes(_typing: Any, array: Any, _index: Any, row: Any) -> Any:
    """Write lanes to the array, beginning at array[index]. Bounds are not checked."""
    if array.dtype != row.element:
        raise TypingError(f"{row} does not fit into {array}")

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        address = _address(context, builder, signature.args[0], args[0], args[1], row)
        builder.store(args[2], address, align=row.element.bitwidth // 8)
        return context.get_dummy_value()

    return types.void(array, types.intp, row), generate


@instruction
def less_where(_typing: Any, row: Any, bits: Any, _value: Any) -> Any:
    """The lanes, less this number wherever the bit is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        less = builder.fsub(args[0], everywhere(builder, row, args[2]))
        return builder.select(_mask(builder, args[1], row.width), less, args[0])

    return row(row, bits, row.element), generate


@instruction
def against_bits(_typing: Any, row: Any, bits: Any) -> Any:
    """Minus spin times number in every lane; the spin is -1 wherever the bit is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.select(_mask(builder, args[1], row.width), args[0], builder.fneg(args[0]))

    return row(row, bits), generate


@instruction
def with_spins(_typing: Any, row: Any, bits: Any, _value: Any) -> Any:
    """The lanes plus this number times the lane's spin, -1 wherever the bit is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        value = everywhere(builder, row, args[2])
        down, up = builder.fsub(args[0], value), builder.fadd(args[0], value)
        return builder.select(_mask(builder, args[1], row.width), down, up)

    return row(row, bits, row.element), generate


@instruction
def against_spins(_typing: Any, row: Any, spins: Any) -> Any:
    """Minus spin times number in every lane; ``spins`` (int8) are +1 and -1."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        down = builder.icmp_signed("<", args[1], spins.constant(0))
        return builder.select(down, args[0], builder.fneg(args[0]))

    return row(row, spins), generate


@instruction
def add_where(_typing: Any, row: Any, bits: Any, addend: Any) -> Any:
    """The lanes, plus those of ``addend`` wherever the bit is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        more = builder.fadd(args[0], args[2])
        return builder.select(_mask(builder, args[1], row.width), more, args[0])

    return row(row, bits, addend), generate


@instruction
def add_lanes(_typing: Any, row: Any, addend: Any) -> Any:
    """The sum, lane by lane, in the precision of the first."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        more = args[1] if row == addend else builder.fpext(args[1], row.llvm)
        return builder.fadd(args[0], more)

    return row(row, addend), generate


@instruction
def prefetch_at(_typing: Any, array: Any, _index: Any) -> Any:
    """Ask for the cache line of array[index] ahead of its use."""
    byte, number = ir.IntType(8).as_pointer(), ir.IntType(32)
    to_read_in_all_caches = [ir.Constant(number, flag) for flag in (0, 3, 1)]

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        function = declared(builder, "llvm.prefetch.p0", ir.VoidType(), [byte, number, number, number])
        data = context.make_array(signature.args[0])(context, builder, args[0]).data
        place = builder.bitcast(builder.gep(data, [args[1]]), byte)
        builder.call(function, [place, *to_read_in_all_caches])
        return context.get_dummy_value()

    return types.void(array, types.intp), generate


@instruction
def lowest_bit(_typing: Any, bits: Any) -> Any:
    """The number of the lowest set bit."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        word = builder.zext(args[0], ir.IntType(64)) if bits.bitwidth < 64 else args[0]
        return builder.cttz(word, ir.Constant(ir.IntType(1), 1))

    return types.uint64(bits), generate
