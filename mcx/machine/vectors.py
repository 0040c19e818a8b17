"""Arithmetic on rows in vectors of many lanes, where loops over lanes would go through memory for each operation.

A loop over two rows that are both read and written pays for the compiler's doubt whether they are one (0.48 against
0.23 ns a lane), and one that adds up over many rows stores its sums after each (0.45 against 0.2). Each function has a
plain twin for runs without the compiler.
"""

from __future__ import annotations

from mcx.machine.draw_plan import LEADING
from mcx.machine.jit import COMPILED

TURNED, BENT = 64, 32  # lanes at a time; 32 lanes of LEADING sums are half of the widest registers

if COMPILED:
    from llvmlite import ir
    from numba.core import cgutils, types
    from numba.extending import intrinsic

    _DOUBLE, _BYTE, _INDEX = ir.DoubleType(), ir.IntType(8), ir.IntType(64)
    _CONTRACT = ("contract",)

    def _place(builder, array, row, column, kind):
        """A pointer to what stands in a row of float64 from a column on."""
        start = builder.gep(
            builder.bitcast(array.data, _BYTE.as_pointer()),
            [builder.mul(row, builder.extract_value(array.strides, 0))],
        )
        there = builder.gep(builder.bitcast(start, _DOUBLE.as_pointer()), [column])
        return builder.bitcast(there, kind.as_pointer())

    def _spread(builder, scalar, vector):
        """The scalar in every lane."""
        one = builder.insert_element(ir.Constant(vector, ir.Undefined), scalar, ir.IntType(32)(0))
        zeros = ir.Constant(ir.VectorType(ir.IntType(32), vector.count), [0] * vector.count)
        return builder.shuffle_vector(one, one, zeros)

    def _times(builder, a, b):
        return builder.fmul(a, b, flags=_CONTRACT)

    @intrinsic
    def turn(typing_context, rows, i, j, start, c, s):
        """TURNED lanes from `start` on of rows i and j (float64) become c x + s y and s x - c y."""

        def code(context, builder, signature, arguments):
            array = context.make_array(signature.args[0])(context, builder, arguments[0])
            vector = ir.VectorType(_DOUBLE, TURNED)
            first, second = (_place(builder, array, row, arguments[3], vector) for row in arguments[1:3])
            c, s = (_spread(builder, scalar, vector) for scalar in arguments[4:])
            x, y = builder.load(first, align=8), builder.load(second, align=8)
            onward = builder.fadd(_times(builder, c, x), _times(builder, s, y), flags=_CONTRACT)
            across = builder.fsub(_times(builder, s, x), _times(builder, c, y), flags=_CONTRACT)
            builder.store(onward, first, align=8)
            builder.store(across, second, align=8)
            return context.get_dummy_value()

        return types.none(rows, types.intp, types.intp, types.intp, types.float64, types.float64), code

    @intrinsic
    def bend(typing_context, rows, first, stride, start, left, right):
        """BENT lanes from `start` on of the rows first, first + stride, ... (float64) become z - left (right' z), for
        left and right of shape (such rows, LEADING)."""

        def code(context, builder, signature, arguments):
            array, left, right = (
                context.make_array(signature.args[k])(context, builder, arguments[k]) for k in (0, 4, 5)
            )
            vector = ir.VectorType(_DOUBLE, BENT)
            steps = builder.extract_value(right.shape, 0)
            sums = [cgutils.alloca_once(builder, vector) for _ in range(LEADING)]

            def lanes_of(step):
                row = builder.add(builder.mul(step, arguments[2]), arguments[1])
                return _place(builder, array, row, arguments[3], vector)

            def weight(weights, step, k):
                return _spread(builder, builder.load(_place(builder, weights, step, _INDEX(k), _DOUBLE)), vector)

            for total in sums:
                builder.store(ir.Constant(vector, [0.0] * BENT), total)
            with cgutils.for_range(builder, steps) as loop:
                z = builder.load(lanes_of(loop.index), align=8)
                for k, total in enumerate(sums):
                    part = _times(builder, weight(right, loop.index, k), z)
                    builder.store(builder.fadd(builder.load(total), part, flags=_CONTRACT), total)
            with cgutils.for_range(builder, steps) as loop:
                lanes = lanes_of(loop.index)
                z = builder.load(lanes, align=8)
                for k, total in enumerate(sums):
                    part = _times(builder, weight(left, loop.index, k), builder.load(total))
                    z = builder.fsub(z, part, flags=_CONTRACT)
                builder.store(z, lanes, align=8)
            return context.get_dummy_value()

        return types.none(rows, types.intp, types.intp, types.intp, left, right), code

else:

    def turn(rows, i, j, start, c, s):
        x, y = rows[i, start : start + TURNED], rows[j, start : start + TURNED]
        x[:], y[:] = c * x + s * y, s * x - c * y

    def bend(rows, first, stride, start, left, right):
        z = rows[first : first + stride * len(left) : stride, start : start + BENT]
        z -= left @ (right.T @ z)
