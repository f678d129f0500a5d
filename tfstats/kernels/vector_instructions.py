"""The few processor instructions that plain code cannot ask for, each with a plain version of the same result.

Each function here is written out inside the kernel that calls it.  The plain versions carry the ending `_plainly`;
tests hold the two to the same bytes.
"""

from __future__ import annotations

from llvmlite import ir
from numba.core import types
from numba.extending import intrinsic

__all__ = ["trailing_zeros"]

_INT64 = ir.IntType(64)
_BIT = ir.IntType(1)


@intrinsic
def trailing_zeros(typing_context, word):
    """Number of zero bits below the lowest set bit of a uint64; 64 when none is set."""

    def generate(context, builder, signature, arguments):
        kind = ir.FunctionType(_INT64, [_INT64, _BIT])
        function = builder.module.declare_intrinsic("llvm.cttz", [_INT64], kind)
        return builder.call(function, [arguments[0], _BIT(0)])

    return types.int64(types.uint64), generate
