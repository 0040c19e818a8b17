"""What the compiler is told about the rows of a register file; both have a plain twin that does nothing.

Each array that a kernel takes from another is counted, with a locked addition and a subtraction later: two or
three pairs for an instruction cost as much as its loop. And LLVM holds some processors to vectors of 256 bits
although they have 512, which was good advice for code with a few wide instructions in it, not for this.
"""

from __future__ import annotations

from mcx.machine.jit import COMPILED

if COMPILED:
    from numba.core import types
    from numba.extending import intrinsic
    from numba.np.arrayobj import populate_array

    @intrinsic
    def borrowed(typing_context, array):
        """The array without its owner, so that no view of it is counted; the caller keeps the owner alive."""

        def code(context, builder, signature, arguments):
            owned = context.make_array(array)(context, builder, arguments[0])
            view = context.make_array(array)(context, builder)
            populate_array(view, owned.data, owned.shape, owned.strides, owned.itemsize, meminfo=None)
            return view._getvalue()

        return array(array), code

    @intrinsic
    def wide_vectors(typing_context):
        """Let the loops of the calling function use the widest vectors that the processor has."""

        def code(context, builder, signature, arguments):
            # llvmlite's own `add` knows only attributes that are a single word
            set.add(builder.function.attributes, '"prefer-vector-width"="512"')
            return context.get_dummy_value()

        return types.none(), code

else:

    def borrowed(array):
        return array

    def wide_vectors():
        pass
