"""One instruction that the compiler does not reach for by itself: a product and a sum, rounded once.

Contracting a * b + c changes the last bit, so compilers leave it alone unless asked. Asked for by name it halves what a
polynomial costs and keeps the same bits whether a loop is vectorised or not.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, cast

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic


def _add_product(_typing: Any, _addend: Any, _left: Any, _right: Any) -> Any:
    """addend + left * right, rounded once."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        insert: Any = cgutils.get_or_insert_function
        kind = ir.FunctionType(ir.DoubleType(), [ir.DoubleType()] * 3)
        return builder.call(insert(builder.module, kind, "llvm.fma.f64"), [args[1], args[2], args[0]])

    return types.float64(types.float64, types.float64, types.float64), generate


plus_product = cast(Callable[[float, float, float], float], intrinsic(_add_product))
"""plus_product(addend, left, right) in a kernel is addend + left * right, rounded once."""
