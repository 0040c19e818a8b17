"""Exponential, logarithm and inverse normal in plain arithmetic, so that LLVM makes vector loops of them.

`math.exp` in a loop is a scalar call (4 ns a lane against 1). Each function here is a loop without branches
for the usual arguments and a second one, rarely run, for the rest. Rows are float64, at least `lanes` long;
the result never goes where the argument stands. Polynomials were fitted for this file by Remez' exchange in
50 digits.
"""

from __future__ import annotations

import numpy as np

from mcx.machine.bits import bits_to_float, float_to_bits, lowest_bit, mask_above
from mcx.machine.jit import jit
from mcx.machine.rows import wide_vectors

# 2^52 + 2^51: adding it rounds a number below 2^51 to an integer, which is then in the low bits of the sum.
_ROUNDER = 6755399441055744.0
_MANTISSA = np.uint64(52)
_LOG2_E = 1.4426950408889634
_LN2_HIGH, _LN2_LOW = 6.93147180369123816490e-01, 1.90821492927058770002e-10  # the first ends in 21 zero bits
_EXP_USUAL = 708.0
# Whether any lane is out of the usual range is read off the sign of integers, which costs less than a
# comparison: bit patterns of positive numbers have their order, and those of infinity and NaN lie above.
_EXP_USUAL_BITS = np.float64(_EXP_USUAL).view(np.int64)
_MAGNITUDE = np.int64(2**63 - 1)
_ZERO = np.int64(0)

# exp(r) = 1 + r + r^2 (A2 + A3 r + ...), |r| <= ln(2)/2, relative error 4.5e-17
_A2, _A3, _A4 = 0.50000000000000009616, 0.16666666666667069806, 0.041666666666618971234
_A5, _A6, _A7 = 0.0083333333329669548946, 0.0013888888919859524612, 0.00019841270771247752987
_A8, _A9 = 0.00002480151778925905703, 2.7556395564938828394e-6
_A10, _A11 = 2.7621413452613798723e-7, 2.5388277094897738076e-8


@jit
def exp_row(y, x, lanes):
    """y = exp(x) to 1.5 ulp; overflow to inf and gradual underflow as IEEE has them."""
    wide_vectors()
    unusual = _ZERO
    for i in range(lanes):
        a = x[i]
        unusual |= _EXP_USUAL_BITS - (np.int64(float_to_bits(a)) & _MAGNITUDE)
        rounded = a * _LOG2_E + _ROUNDER
        k = rounded - _ROUNDER
        r = (a - k * _LN2_HIGH) - k * _LN2_LOW
        r2 = r * r
        r4 = r2 * r2
        low = (_A2 + r * _A3) + r2 * (_A4 + r * _A5)
        high = (_A6 + r * _A7) + r2 * (_A8 + r * _A9) + r4 * (_A10 + r * _A11)
        power = (1.0 + r) + r2 * (low + r4 * high)
        y[i] = bits_to_float(float_to_bits(power) + (float_to_bits(rounded) << _MANTISSA))
    if unusual < 0:
        for i in range(lanes):
            if not abs(x[i]) <= _EXP_USUAL:
                y[i] = np.exp(x[i])


@jit
def exp_negative(x):
    """exp(x) for x of at most 0, to 1.5 ulp, 1e-304 where it is less: in a loop of other things it is no call."""
    a = max(x, -_EXP_USUAL + 8.0)
    rounded = a * _LOG2_E + _ROUNDER
    k = rounded - _ROUNDER
    r = (a - k * _LN2_HIGH) - k * _LN2_LOW
    r2 = r * r
    r4 = r2 * r2
    low = (_A2 + r * _A3) + r2 * (_A4 + r * _A5)
    high = (_A6 + r * _A7) + r2 * (_A8 + r * _A9) + r4 * (_A10 + r * _A11)
    power = (1.0 + r) + r2 * (low + r4 * high)
    return bits_to_float(float_to_bits(power) + (float_to_bits(rounded) << _MANTISSA))


# With s = f / (2 + f): log(1 + f) = 2 s + s^3 (B0 + B1 s^2 + ...), to 1e-17 for f from 1 / sqrt(2) - 1 to
# sqrt(2) - 1
_B0, _B1, _B2 = 0.66666666666667333758, 0.39999999999477622411, 0.28571428721946341119
_B3, _B4 = 0.22222200992543244733, 0.18183428077000566684
_B5, _B6 = 0.15317767131165016777, 0.14756388685995405375
_SQRT_HALF = np.uint64(0x3FE6A09E00000000)
_TO_SQRT_HALF = np.uint64(0x3FF0000000000000 - 0x3FE6A09E00000000)
_FRACTION = np.uint64((1 << 52) - 1)
_2_TO_52 = np.uint64(0x4330000000000000)
_EXPONENT_ZERO = 4503599627370496.0 + 1023.0
_SMALLEST, _LARGEST = np.finfo(np.float64).tiny, np.finfo(np.float64).max
_SMALLEST_BITS, _LARGEST_BITS = _SMALLEST.view(np.int64), _LARGEST.view(np.int64)


@jit
def log_row(y, x, lanes):
    """y = log(x) to 1 ulp; log(0) = -inf, of a negative number NaN."""
    wide_vectors()
    unusual = _ZERO
    for i in range(lanes):
        bits = float_to_bits(x[i])
        unusual |= (np.int64(bits) - _SMALLEST_BITS) | (_LARGEST_BITS - np.int64(bits))
        bits += _TO_SQRT_HALF
        k = bits_to_float((bits >> _MANTISSA) | _2_TO_52) - _EXPONENT_ZERO
        f = bits_to_float((bits & _FRACTION) + _SQRT_HALF) - 1.0
        s = f / (2.0 + f)
        z = s * s
        z2 = z * z
        low = _B0 + z * _B1 + z2 * (_B2 + z * _B3)
        tail = z * (low + z2 * z2 * (_B4 + z * _B5 + z2 * _B6))
        half = 0.5 * f * f
        y[i] = k * _LN2_HIGH - ((half - (s * (half + tail) + k * _LN2_LOW)) - f)
    if unusual < 0:
        for i in range(lanes):
            if not _SMALLEST <= x[i] <= _LARGEST:
                y[i] = np.log(x[i])


# The inverse normal of u = (1 + s) / 2 is s P(t) / Q(t), t = 1 - s^2 = 4 u (1 - u), to 8e-14 for t >= 0.01. A
# rational function of t itself is less than half the work of a polynomial in -log t (M. Giles, "Approximating
# the erfinv function", 2011; measured 1.8 against 4.3 ns), at the price of 0.5 % of the draws left for the
# tail.
_P0, _P1, _P2 = 3.360603381385715371751e-11, 5.530244853530309383385e-08, 1.820744959760474465326e-05
_P3, _P4, _P5 = 0.001980085571459185961068, 0.08620603607175353187053, 1.639752345022622508324
_P6, _P7, _P8 = 14.09128536603988103654, 54.38767190478729381869, 89.87721930359226508215
_P9, _P10, _P11 = 56.82088311834484017021, 10.64833043315921254871, 0.2662516941725678568872
_Q0, _Q1, _Q2 = 8.428886671171877662393e-12, 1.620978215694127792274e-08, 5.982181365559906595947e-06
_Q3, _Q4, _Q5 = 0.0007228155520336305132886, 0.03504304307286995796976, 0.7493371046173917653119
_Q6, _Q7, _Q8 = 7.360545721985147716003, 33.33226961185851639599, 67.36522959082591820398
_Q9, _Q10 = 55.95126546159139995644, 15.97932098307380530652
_TAIL = int(np.sqrt(0.99) * 2.0**31)  # words from here on, on either side, have t < 0.01
_TAIL_SHIFT, _TAIL_LIMIT = np.int32(_TAIL - 2**31), np.int32(2 * _TAIL - 2**31)
_ONE = np.uint64(1)


@jit
def normal_row(z, words, lanes):
    """z = the inverse normal of (k + 1/2) / 2^32, from words k - 2^31 (int32); lanes: a multiple of 64."""
    wide_vectors()
    for i in range(lanes):
        s = (words[i] + 0.5) * 2.0**-31
        t = 1.0 - s * s
        t2 = t * t
        p_even = ((((_P10 * t2 + _P8) * t2 + _P6) * t2 + _P4) * t2 + _P2) * t2 + _P0
        p_odd = ((((_P11 * t2 + _P9) * t2 + _P7) * t2 + _P5) * t2 + _P3) * t2 + _P1
        q_even = ((((_Q10 * t2 + _Q8) * t2 + _Q6) * t2 + _Q4) * t2 + _Q2) * t2 + _Q0
        q_odd = ((((t2 + _Q9) * t2 + _Q7) * t2 + _Q5) * t2 + _Q3) * t2 + _Q1
        z[i] = s * (p_even + t * p_odd) / (q_even + t * q_odd)
    for start in range(0, lanes, 64):
        mask = mask_above(words, start, _TAIL_SHIFT, _TAIL_LIMIT)
        while mask:
            i = start + lowest_bit(mask)
            z[i] = _tail_normal(words[i])
            mask &= mask - _ONE


@jit
def _tail_normal(word):
    """The inverse normal in the tail, to 1e-15: M. Wichura, "Algorithm AS 241", Applied Statistics 37 (1988),
    477-484, the branch in r = sqrt(-log(probability)) that holds to r = 5; a word of 32 bits ends at 4.8."""
    s = (word + 0.5) * 2.0**-31
    r = np.sqrt(-np.log(0.5 - 0.5 * abs(s))) - 1.6
    p = 2.27238449892691845833e-2 + r * 7.74545014278341407640e-4
    p = 1.27045825245236838258 + r * (2.41780725177450611770e-1 + r * p)
    p = 5.76949722146069140550 + r * (3.64784832476320460504 + r * p)
    p = 1.42343711074968357734 + r * (4.63033784615654529590 + r * p)
    q = 5.47593808499534494600e-4 + r * 1.05075007164441684324e-9
    q = 1.48103976427480074590e-1 + r * (1.51986665636164571966e-2 + r * q)
    q = 1.67638483018380384940 + r * (6.89767334985100004550e-1 + r * q)
    q = 1.0 + r * (2.05319162663775882187 + r * q)
    return p / q if s > 0.0 else -p / q
