"""Blocks of neighbouring numbers as one value that a kernel can hold in registers.

numba compiles scalar loops and leaves vectors to the optimiser, which gives up on butterfly-shaped access. A block
is an LLVM vector of ``WIDTH`` doubles with just the operations that the walk kernel needs. It is wider than any
register on purpose: the code generator cuts it into registers of the size the processor has, a swap of far lanes
then costs no more than a change of names, and a sum that two registers share is formed once.

A twin for another element type needs its own ``LanesType``, ``load`` and ``splat``; the rest is generic.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, cast

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.core.errors import TypingError
from numba.extending import intrinsic, models, register_model

WIDTH = 64
"""Numbers in one block, a power of two. Measured with 8 doubles a register: 16, 32 and 128 are 10 to 40 % slower."""

CACHE_LINE = 8
"""Doubles in one cache line, and in the widest register."""

Block = Any
"""What a block is to the type checker."""


class LanesType(types.Type):
    """The numba type of a block of ``width`` numbers of one element type."""

    def __init__(self, element: types.Float, width: int) -> None:
        self.element = element
        self.width = width
        super().__init__(name=f"Lanes({element}, {width})")

    @property
    def llvm(self) -> ir.VectorType:
        """The type in machine code."""
        scalar = ir.DoubleType() if self.element == types.float64 else ir.FloatType()
        return ir.VectorType(scalar, self.width)

    def order(self, lanes: list[int]) -> ir.Constant:
        """A constant that tells a shuffle which lane goes where."""
        return ir.Constant(ir.VectorType(ir.IntType(32), self.width), lanes)


@register_model(LanesType)
class _LanesModel(models.PrimitiveModel):
    def __init__(self, manager: Any, lanes: LanesType) -> None:
        super().__init__(manager, lanes, lanes.llvm)  # type: ignore[no-untyped-call, unused-ignore]


DOUBLES = LanesType(types.float64, WIDTH)


def _instruction(typing: Callable[..., Any]) -> Callable[..., Any]:
    """numba's intrinsic, in a form that a type checker accepts: callers leave out the first argument."""
    return cast(Callable[..., Any], intrinsic(typing))


def _require_array(array: Any) -> None:
    if not (isinstance(array, types.Array) and array.layout == "C" and array.dtype == DOUBLES.element):
        raise TypingError(f"blocks live in contiguous {DOUBLES.element} arrays; this is {array}")


def _address(context: Any, builder: Any, array_type: Any, array: Any, index: Any) -> Any:
    data = context.make_array(array_type)(context, builder, array).data
    return builder.bitcast(builder.gep(data, [index]), DOUBLES.llvm.as_pointer())


def _declared(builder: Any, name: str, result: Any, operands: list[Any]) -> Any:
    insert: Any = cgutils.get_or_insert_function
    return insert(builder.module, ir.FunctionType(result, operands), name)


@_instruction
def load(_typing: Any, array: Any, _index: Any) -> Any:
    """The block array[index : index + WIDTH]. Bounds are not checked; a multiple of 64 bytes is the fast place."""
    _require_array(array)

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.load(_address(context, builder, signature.args[0], *args), align=8)

    return DOUBLES(array, types.intp), generate


@_instruction
def store(_typing: Any, array: Any, _index: Any, block: Any) -> Any:
    """Write a block to array[index : index + WIDTH]."""
    _require_array(array)

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        builder.store(args[2], _address(context, builder, signature.args[0], *args[:2]), align=8)
        return context.get_dummy_value()

    return types.void(array, types.intp, block), generate


@_instruction
def prefetch(_typing: Any, array: Any, _index: Any) -> Any:
    """Ask for the block at array[index] ahead of its use; an index beyond the array does no harm."""
    _require_array(array)
    byte, number = ir.IntType(8).as_pointer(), ir.IntType(32)
    to_read_in_all_caches = [ir.Constant(number, flag) for flag in (0, 3, 1)]

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        function = _declared(builder, "llvm.prefetch.p0", ir.VoidType(), [byte, number, number, number])
        data = context.make_array(signature.args[0])(context, builder, args[0]).data
        for line in range(0, WIDTH, CACHE_LINE):
            place = builder.gep(data, [builder.add(args[1], ir.Constant(args[1].type, line))])
            builder.call(function, [builder.bitcast(place, byte), *to_read_in_all_caches])
        return context.get_dummy_value()

    return types.void(array, types.intp), generate


@_instruction
def splat(_typing: Any, _value: Any) -> Any:
    """A block with this number in every lane."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        nothing = ir.Constant(DOUBLES.llvm, ir.Undefined)
        first = builder.insert_element(nothing, args[0], ir.Constant(ir.IntType(32), 0))
        return builder.shuffle_vector(first, nothing, DOUBLES.order([0] * WIDTH))

    return DOUBLES(DOUBLES.element), generate


@_instruction
def swap(_typing: Any, block: Any, mask: Any) -> Any:
    """The block whose lane i is lane ``i ^ mask`` of the given one; ``mask`` is a literal number."""
    if not isinstance(mask, types.IntegerLiteral):
        raise TypingError("the mask of a lane swap must be a literal number")
    order = block.order([lane ^ mask.literal_value for lane in range(block.width)])

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.shuffle_vector(args[0], ir.Constant(block.llvm, ir.Undefined), order)

    return block(block, mask), generate


@_instruction
def add(_typing: Any, left: Any, right: Any) -> Any:
    """left + right in every lane."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.fadd(*args)

    return left(left, right), generate


def _fused(builder: Any, block: LanesType, operands: list[Any]) -> Any:
    name = f"llvm.fma.v{block.width}{'f64' if block.element == types.float64 else 'f32'}"
    return builder.call(_declared(builder, name, block.llvm, [block.llvm] * 3), operands)


@_instruction
def fma(_typing: Any, left: Any, right: Any, addend: Any) -> Any:
    """left * right + addend in every lane, rounded once."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return _fused(builder, left, args)

    return left(left, right, addend), generate


@_instruction
def fms(_typing: Any, left: Any, right: Any, subtrahend: Any) -> Any:
    """left * right - subtrahend in every lane, rounded once."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return _fused(builder, left, [args[0], args[1], builder.fneg(args[2])])

    return left(left, right, subtrahend), generate
