"""What the compiler is told about loops over rows; it has a plain twin that does nothing.

LLVM holds some processors to vectors of 256 bits although they have 512, which was good advice for code with a few wide
instructions in it, not for this.
"""

from __future__ import annotations

from mcx.machine.jit import COMPILED

if COMPILED:
    from numba.core import types
    from numba.extending import intrinsic

    @intrinsic
    def wide_vectors(typing_context):
        """Let the loops of the calling function use the widest vectors that the processor has."""

        def code(context, builder, signature, arguments):
            # llvmlite's own `add` knows only attributes that are a single word
            set.add(builder.function.attributes, '"prefer-vector-width"="512"')
            return context.get_dummy_value()

        return types.none(), code

else:

    def wide_vectors():
        pass
