"""Two hints for the compiler of a kernel whose inner loops run over lanes; without them it is right but slower.

That no two array arguments overlap spares run-time checks in every loop; on processors with 512-bit vectors the compiler
has to be told to use them. Neither changes a bit of any result.
"""

from __future__ import annotations

from typing import Any

from numba import types
from numba.core import config
from numba.extending import intrinsic


def _hints(typingctx):  # type: ignore[no-untyped-def]
    def codegen(context, builder, signature, args):  # type: ignore[no-untyped-def]
        from llvmlite import ir

        for argument in builder.function.args[2:]:  # after the return value and the exception slot
            if isinstance(argument.type, ir.PointerType):
                argument.add_attribute("noalias")
        # llvmlite knows no function attribute with a value, but prints what its set of attributes holds
        set.add(builder.function.attributes, '"prefer-vector-width"="512"')
        return context.get_dummy_value()

    return types.none(), codegen


def _nothing() -> None:
    pass


def _aside(typingctx):  # type: ignore[no-untyped-def]
    def codegen(context, builder, signature, args):  # type: ignore[no-untyped-def]
        for attribute in ("noinline", "optsize"):
            builder.function.attributes.add(attribute)
        return context.get_dummy_value()

    return types.none(), codegen


# called in a kernel, says both of it; an intrinsic exists in compiled code only
separate_arrays_wide_vectors: Any = _nothing if config.DISABLE_JIT else intrinsic(_hints)  # type: ignore[attr-defined]
# called in a function that a kernel needs now and then, keeps it out of the kernel and small, which halves compilation
seldom_called: Any = _nothing if config.DISABLE_JIT else intrinsic(_aside)  # type: ignore[attr-defined]
