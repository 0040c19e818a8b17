"""Arithmetic on 64 lanes as one vector, where a loop over two rows that are both read and written would pay for the
compiler's doubt whether they are the same row (measured: 0.48 against 0.23 ns a lane); with a plain twin."""

from __future__ import annotations

from mcx.machine.jit import COMPILED

if COMPILED:
    from llvmlite import ir
    from numba.core import types
    from numba.extending import intrinsic

    @intrinsic
    def turn(typing_context, rows, i, j, start, c, s):
        """64 lanes from `start` on of rows i and j (float64, each contiguous) become c x + s y and s x - c y."""

        def code(context, builder, signature, arguments):
            array = context.make_array(signature.args[0])(context, builder, arguments[0])
            vector = ir.VectorType(ir.DoubleType(), 64)
            contract = ("contract",)

            def lanes_of(row):
                offset = builder.mul(row, builder.extract_value(array.strides, 0))
                first = builder.gep(builder.bitcast(array.data, ir.IntType(8).as_pointer()), [offset])
                there = builder.gep(builder.bitcast(first, ir.DoubleType().as_pointer()), [arguments[3]])
                return builder.bitcast(there, vector.as_pointer())

            def spread(scalar):
                one = builder.insert_element(ir.Constant(vector, ir.Undefined), scalar, ir.IntType(32)(0))
                return builder.shuffle_vector(one, one, ir.Constant(ir.VectorType(ir.IntType(32), 64), [0] * 64))

            def times(a, b):
                return builder.fmul(a, b, flags=contract)

            first, second, c, s = lanes_of(arguments[1]), lanes_of(arguments[2]), *map(spread, arguments[4:])
            x, y = builder.load(first, align=8), builder.load(second, align=8)
            builder.store(builder.fadd(times(c, x), times(s, y), flags=contract), first, align=8)
            builder.store(builder.fsub(times(s, x), times(c, y), flags=contract), second, align=8)
            return context.get_dummy_value()

        return types.none(rows, types.intp, types.intp, types.intp, types.float64, types.float64), code

else:

    def turn(rows, i, j, start, c, s):
        x, y = rows[i, start : start + 64], rows[j, start : start + 64]
        x[:], y[:] = c * x + s * y, s * x - c * y
