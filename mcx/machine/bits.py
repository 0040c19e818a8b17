"""Bit patterns of numbers inside vector loops; each has a plain twin for runs without the compiler.

A `view` of the buffer that a loop also writes fails LLVM's alias check and the loop runs scalar; a bitcast in
a register costs nothing. The mask of 64 comparisons finds rare lanes for 0.1 ns a lane, where a loop with an
`if` in it takes 1.2. The sum of 64 numbers is added in vectors of 8, lane i with lanes i + 8, i + 16, ...: an order
that the compiler may not choose by itself.
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

    def _sum_of_64(context, builder, signature, arrays, first):
        """The code that adds up 64 float64 of one array, or 64 products of two."""
        vector = ir.VectorType(ir.DoubleType(), 8)
        starts = [
            context.make_array(kind)(context, builder, array).data
            for kind, array in zip(signature.args, arrays, strict=False)
        ]

        def load(data, number):
            at = builder.add(first, ir.Constant(first.type, 8 * number))
            return builder.load(builder.bitcast(builder.gep(data, [at]), vector.as_pointer()), align=8)

        total = None
        for number in range(8):
            value = load(starts[0], number)
            if len(starts) == 2:
                value = builder.fmul(value, load(starts[1], number), flags=("contract",))
            total = builder.fadd(total, value, flags=("contract",)) if total is not None else value
        for half in (4, 2, 1):
            moved = ir.Constant(ir.VectorType(ir.IntType(32), 8), [(lane + half) % 8 for lane in range(8)])
            total = builder.fadd(total, builder.shuffle_vector(total, total, moved))
        return builder.extract_element(total, ir.IntType(32)(0))

    @intrinsic
    def sum_values(typing_context, x, first):
        """The sum of x[first : first + 64]; float64, contiguous."""

        def code(context, builder, signature, arguments):
            return _sum_of_64(context, builder, signature, arguments[:1], arguments[1])

        return types.float64(x, types.intp), code

    @intrinsic
    def sum_products(typing_context, x, y, first):
        """The sum of x[i] * y[i] over the 64 numbers from `first` on."""

        def code(context, builder, signature, arguments):
            return _sum_of_64(context, builder, signature, arguments[:2], arguments[2])

        return types.float64(x, y, types.intp), code

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

    def sum_values(x, first):
        total = x[first : first + 64].reshape(8, 8).sum(axis=0)
        for half in (4, 2, 1):
            total = total[:half] + total[half:]
        return total[0]

    def sum_products(x, y, first):
        return sum_values(x[first : first + 64] * y[first : first + 64], 0)

    def lowest_bit(mask):
        return (int(mask) & -int(mask)).bit_length() - 1

    def reversed_bits(word):
        return np.uint32(int(f"{int(word):032b}"[::-1], 2))
