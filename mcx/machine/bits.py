"""Bit patterns of numbers inside vector loops; each has a plain twin for runs without the compiler.

A `view` of the buffer that a loop also writes fails LLVM's alias check and the loop runs scalar; a bitcast in
a register costs nothing. The mask of 64 comparisons finds rare lanes for 0.1 ns a lane, where a loop with an
`if` in it takes 1.2.
"""

from __future__ import annotations

import numpy as np

from mcx.machine.jit import COMPILED

if COMPILED:
    from llvmlite import ir
    from numba.core import types
    from numba.extending import intrinsic

    @intrinsic
    def float_to_bits(typing_context, x):
        """The bit pattern of a float64, as uint64."""

        def code(context, builder, signature, arguments):
            return builder.bitcast(arguments[0], context.get_value_type(types.uint64))

        return types.uint64(types.float64), code

    @intrinsic
    def bits_to_float(typing_context, x):
        """The float64 with this bit pattern (uint64)."""

        def code(context, builder, signature, arguments):
            return builder.bitcast(arguments[0], context.get_value_type(types.float64))

        return types.float64(types.uint64), code

    @intrinsic
    def mask_above(typing_context, words, start, shift, limit):
        """Bit j tells whether int32 words[start + j] + shift > limit, the sum wrapping round; j = 0 .. 63."""

        def code(context, builder, signature, arguments):
            array = context.make_array(signature.args[0])(context, builder, arguments[0])
            vector = ir.VectorType(ir.IntType(32), 64)
            here = builder.bitcast(builder.gep(array.data, [arguments[1]]), vector.as_pointer())

            def spread(scalar):
                one = builder.insert_element(ir.Constant(vector, ir.Undefined), scalar, ir.IntType(32)(0))
                return builder.shuffle_vector(one, one, ir.Constant(vector, [0] * 64))

            shifted = builder.add(builder.load(here, align=4), spread(arguments[2]))
            return builder.bitcast(builder.icmp_signed(">", shifted, spread(arguments[3])), ir.IntType(64))

        return types.uint64(words, types.intp, types.int32, types.int32), code

    @intrinsic
    def lowest_bit(typing_context, mask):
        """Number of the lowest bit set in a mask (uint64) that is not zero."""

        def code(context, builder, signature, arguments):
            return builder.cttz(arguments[0], ir.IntType(1)(1))

        return types.int64(types.uint64), code

    @intrinsic
    def reversed_bits(typing_context, word):
        """A uint32 with its first bit last."""

        def code(context, builder, signature, arguments):
            turn = builder.module.declare_intrinsic("llvm.bitreverse", [ir.IntType(32)])
            return builder.call(turn, arguments)

        return types.uint32(types.uint32), code

else:

    def float_to_bits(x):
        return np.float64(x).view(np.uint64)

    def bits_to_float(x):
        return np.uint64(x).view(np.float64)

    def mask_above(words, start, shift, limit):
        above = words[start : start + 64] + np.int32(shift) > limit
        return np.packbits(above, bitorder="little").view(np.uint64)[0]

    def lowest_bit(mask):
        return (int(mask) & -int(mask)).bit_length() - 1

    def reversed_bits(word):
        return np.uint32(int(f"{int(word):032b}"[::-1], 2))
