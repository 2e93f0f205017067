"""Blocks of neighbouring numbers as one value that a kernel can hold in registers.

numba compiles scalar loops and leaves vectors to the optimiser, which gives up on butterfly-shaped access. A block
is an LLVM vector of 64 doubles or 128 floats with just the operations that the walk kernel needs. It is wider than
any register on purpose: the code generator cuts it into registers of the size the processor has, a swap of far lanes
then costs no more than a change of names, and a sum that two registers share is formed once.

The type of the array or number that a block comes from decides which of the two it is; the rest is generic.
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from typing import Any, cast

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.core.errors import TypingError
from numba.extending import intrinsic, models, register_model

WIDTH = 64
"""Doubles in one block, a power of two. Measured with 8 doubles a register: 16, 32 and 128 are 10 to 40 % slower."""

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


BLOCKS = {types.float64: LanesType(types.float64, WIDTH), types.float32: LanesType(types.float32, 2 * WIDTH)}
"""The block of each element type: eight registers of 512 bits."""


def _instruction(typing: Callable[..., Any]) -> Callable[..., Any]:
    """numba's intrinsic, in a form that a type checker accepts: callers leave out the first argument."""
    return cast(Callable[..., Any], intrinsic(typing))


def _block_of(array: Any) -> LanesType:
    if not (isinstance(array, types.Array) and array.layout == "C" and array.dtype in BLOCKS):
        raise TypingError(f"blocks live in contiguous arrays of float64 or float32; this is {array}")
    return BLOCKS[array.dtype]


def _address(context: Any, builder: Any, array_type: Any, array: Any, index: Any) -> Any:
    data = context.make_array(array_type)(context, builder, array).data
    return builder.bitcast(builder.gep(data, [index]), BLOCKS[array_type.dtype].llvm.as_pointer())


def _declared(builder: Any, name: str, result: Any, operands: list[Any]) -> Any:
    insert: Any = cgutils.get_or_insert_function
    return insert(builder.module, ir.FunctionType(result, operands), name)


@_instruction
def width_in(_typing: Any, array: Any) -> Any:
    """How many numbers of this array make one block."""
    width = _block_of(array).width

    def generate(context: Any, _builder: Any, _signature: Any, _args: Any) -> Any:
        return context.get_constant(types.intp, width)

    return types.intp(array), generate


@_instruction
def load(_typing: Any, array: Any, _index: Any) -> Any:
    """The block that begins at array[index]. Bounds are not checked; a multiple of 64 bytes is the fast place."""
    block = _block_of(array)

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        address = _address(context, builder, signature.args[0], *args)
        return builder.load(address, align=block.element.bitwidth // 8)

    return block(array, types.intp), generate


@_instruction
def load_bytes(_typing: Any, array: Any, _index: Any, block: Any) -> Any:
    """As many signed bytes as ``block`` has lanes, from array[index] on, as a block of its kind."""
    if not (isinstance(array, types.Array) and array.layout == "C" and array.dtype == types.int8):
        raise TypingError(f"bytes live in contiguous arrays of int8; this is {array}")

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        data = context.make_array(signature.args[0])(context, builder, args[0]).data
        whole = ir.VectorType(ir.IntType(8), block.width)
        address = builder.bitcast(builder.gep(data, [args[1]]), whole.as_pointer())
        return builder.sitofp(builder.load(address, align=1), block.llvm)

    return block(array, types.intp, block), generate


@_instruction
def store(_typing: Any, array: Any, _index: Any, block: Any) -> Any:
    """Write a block to the array, beginning at array[index]."""
    if _block_of(array) != block:
        raise TypingError(f"{block} does not fit into {array}")

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        address = _address(context, builder, signature.args[0], *args[:2])
        builder.store(args[2], address, align=block.element.bitwidth // 8)
        return context.get_dummy_value()

    return types.void(array, types.intp, block), generate


@_instruction
def prefetch(_typing: Any, array: Any, _index: Any) -> Any:
    """Ask for the block at array[index] ahead of its use; an index beyond the array does no harm."""
    block = _block_of(array)
    line_length = 8 * CACHE_LINE * 8 // block.element.bitwidth
    byte, number = ir.IntType(8).as_pointer(), ir.IntType(32)
    to_read_in_all_caches = [ir.Constant(number, flag) for flag in (0, 3, 1)]

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        function = _declared(builder, "llvm.prefetch.p0", ir.VoidType(), [byte, number, number, number])
        data = context.make_array(signature.args[0])(context, builder, args[0]).data
        for line in range(0, block.width, line_length):
            place = builder.gep(data, [builder.add(args[1], ir.Constant(args[1].type, line))])
            builder.call(function, [builder.bitcast(place, byte), *to_read_in_all_caches])
        return context.get_dummy_value()

    return types.void(array, types.intp), generate


@_instruction
def splat(_typing: Any, value: Any) -> Any:
    """A block with this number in every lane: of floats for a float32, of doubles for anything else."""
    block = BLOCKS[value if value == types.float32 else types.float64]

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        nothing = ir.Constant(block.llvm, ir.Undefined)
        first = builder.insert_element(nothing, args[0], ir.Constant(ir.IntType(32), 0))
        return builder.shuffle_vector(first, nothing, block.order([0] * block.width))

    return block(block.element), generate


def _swapped(builder: Any, block: LanesType, value: Any, mask: int) -> Any:
    order = block.order([lane ^ mask for lane in range(block.width)])
    return builder.shuffle_vector(value, ir.Constant(block.llvm, ir.Undefined), order)


@_instruction
def swap(_typing: Any, block: Any, mask: Any) -> Any:
    """The block whose lane i is lane ``i ^ mask`` of the given one; ``mask`` is a literal number."""
    if not isinstance(mask, types.IntegerLiteral):
        raise TypingError("the mask of a lane swap must be a literal number")

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return _swapped(builder, block, args[0], mask.literal_value)

    return block(block, mask), generate


@_instruction
def neighbours(_typing: Any, block: Any) -> Any:
    """The block whose lane i sums all lanes whose number differs from i in one bit.

    Swaps of whole registers are summed apart from those within: the first two sums are the same for two registers.
    """

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        def summed(masks: list[int]) -> Any:
            blocks = [_swapped(builder, block, args[0], mask) for mask in masks]
            return functools.reduce(builder.fadd, blocks)

        masks = [1 << bit for bit in range(block.width.bit_length() - 1)]
        within = 8 * CACHE_LINE * 8 // block.element.bitwidth
        near, far = [mask for mask in masks if mask < within], [mask for mask in masks if mask >= within]
        return builder.fadd(summed(near), summed(far))

    return block(block), generate


@_instruction
def total(_typing: Any, block: Any) -> Any:
    """The sum of all lanes, added up by halves."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        value, mask = args[0], block.width // 2
        while mask:
            value = builder.fadd(value, _swapped(builder, block, value, mask))
            mask //= 2
        return builder.extract_element(value, ir.Constant(ir.IntType(32), 0))

    return block.element(block), generate


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
