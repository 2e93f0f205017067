"""Eight chains side by side: numbers, one for each chain, that a kernel holds in one register.

Chains that take the same spins in the same order differ only in what they decide. With a lane for each, a decision is a
mask and costs no jump, which is what a chain on its own waits for most. All operations here work lane by lane, so
that a chain ends the same to the last bit whichever chains run beside it.

A *pack* is an LLVM vector of eight doubles, a *mask* one of eight truth values.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, cast

import numpy as np
from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.core.errors import TypingError
from numba.extending import intrinsic, models, register_model

from patchwalk.subsolvers.contract import F64

LANES = 8
"""Chains in a pack: a register of 512 bits, or two of 256."""


class _PackType(types.Type):
    """The numba type of a pack or a mask."""

    def __init__(self, name: str, element: ir.Type) -> None:
        self.llvm = ir.VectorType(element, LANES)
        super().__init__(name=f"{name}({LANES})")


@register_model(_PackType)
class _PackModel(models.PrimitiveModel):
    def __init__(self, manager: Any, pack: _PackType) -> None:
        super().__init__(manager, pack, pack.llvm)  # type: ignore[no-untyped-call, unused-ignore]


PACK = _PackType("Pack", ir.DoubleType())
MASK = _PackType("Mask", ir.IntType(1))

Pack = Any
"""What a pack or a mask is to the type checker."""


def room_for_packs(count: int) -> F64:
    """Room for packs, f64 (count, 8), that begins where a register is loaded in one piece; its content is arbitrary."""
    room = np.empty(LANES * count + LANES)
    begin = (-room.ctypes.data % 64) // 8
    return room[begin : begin + LANES * count].reshape(count, LANES)


def _instruction(typing: Callable[..., Any]) -> Callable[..., Any]:
    """numba's intrinsic, in a form that a type checker accepts: callers leave out the first argument."""
    return cast(Callable[..., Any], intrinsic(typing))


def _address(context: Any, builder: Any, array_type: Any, array: Any, place: Any) -> Any:
    data = context.make_array(array_type)(context, builder, array).data
    first = builder.gep(data, [builder.mul(place, ir.Constant(place.type, LANES))])
    return builder.bitcast(first, PACK.llvm.as_pointer())


def _must_hold_packs(array: Any) -> None:
    if not (isinstance(array, types.Array) and array.layout == "C" and array.dtype == types.float64):
        raise TypingError(f"packs live in contiguous arrays of float64; this is {array}")


@_instruction
def load(_typing: Any, array: Any, _place: Any) -> Any:
    """The pack at this place, counted in packs from the array's beginning. Bounds are not checked."""
    _must_hold_packs(array)

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.load(_address(context, builder, signature.args[0], *args), align=8)

    return PACK(array, types.intp), generate


@_instruction
def store(_typing: Any, array: Any, _place: Any, _pack: Any) -> Any:
    """Write a pack to the array at this place, counted in packs."""
    _must_hold_packs(array)

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        builder.store(args[2], _address(context, builder, signature.args[0], *args[:2]), align=8)
        return context.get_dummy_value()

    return types.void(array, types.intp, PACK), generate


@_instruction
def spread(_typing: Any, _number: Any) -> Any:
    """A pack with this number in every lane."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        nothing = ir.Constant(PACK.llvm, ir.Undefined)
        first = builder.insert_element(nothing, args[0], ir.Constant(ir.IntType(32), 0))
        return builder.shuffle_vector(first, nothing, ir.Constant(ir.VectorType(ir.IntType(32), LANES), [0] * LANES))

    return PACK(types.float64), generate


@_instruction
def add(_typing: Any, _left: Any, _right: Any) -> Any:
    """left + right."""
    return PACK(PACK, PACK), lambda _context, builder, _signature, args: builder.fadd(*args)


@_instruction
def multiply(_typing: Any, _left: Any, _right: Any) -> Any:
    """left * right."""
    return PACK(PACK, PACK), lambda _context, builder, _signature, args: builder.fmul(*args)


@_instruction
def add_product(_typing: Any, _sum: Any, _left: Any, _right: Any) -> Any:
    """sum + left * right, rounded once."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        insert: Any = cgutils.get_or_insert_function
        kind = ir.FunctionType(PACK.llvm, [PACK.llvm] * 3)
        return builder.call(insert(builder.module, kind, f"llvm.fma.v{LANES}f64"), [args[1], args[2], args[0]])

    return PACK(PACK, PACK, PACK), generate


@_instruction
def not_above(_typing: Any, _left: Any, _right: Any) -> Any:
    """The mask of left <= right."""
    return MASK(PACK, PACK), lambda _context, builder, _signature, args: builder.fcmp_ordered("<=", *args)


@_instruction
def differ(_typing: Any, _left: Any, _right: Any) -> Any:
    """The mask of left != right."""
    return MASK(PACK, PACK), lambda _context, builder, _signature, args: builder.fcmp_ordered("!=", *args)


@_instruction
def both(_typing: Any, _one: Any, _other: Any) -> Any:
    """The mask of lanes set in both masks."""
    return MASK(MASK, MASK), lambda _context, builder, _signature, args: builder.and_(*args)


@_instruction
def either(_typing: Any, _one: Any, _other: Any) -> Any:
    """The mask of lanes set in one of the masks or in both."""
    return MASK(MASK, MASK), lambda _context, builder, _signature, args: builder.or_(*args)


@_instruction
def where(_typing: Any, _mask: Any, _pack: Any, _otherwise: Any) -> Any:
    """The lanes of one pack where the mask is set, of the other where not."""
    return PACK(MASK, PACK, PACK), lambda _context, builder, _signature, args: builder.select(*args)


@_instruction
def anywhere(_typing: Any, _mask: Any) -> Any:
    """Whether any lane of the mask is set."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        bits = builder.bitcast(args[0], ir.IntType(LANES))
        return builder.icmp_unsigned("!=", bits, ir.Constant(bits.type, 0))

    return types.boolean(MASK), generate
