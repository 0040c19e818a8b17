/* The rival of kernel.py: an arithmetic Asian call as one fused loop nest, with the machine's generator (Philox4x32-10)
 * and its inverse normal, so that it must find the same price. Compiled by kernel.py:
 *
 *     gcc -O3 -march=native -mprefer-vector-width=512 -ffast-math -shared -fPIC
 *
 * LIBRARY_EXP takes the vectorised exp of the C library, otherwise the machine's polynomial is used.
 */
#include <math.h>
#include <stdint.h>
#include <string.h>

#ifndef LANES
#define LANES 64
#endif
#define CHUNK 32

static const double P[] = {3.360603381385715371751e-11, 5.530244853530309383385e-08, 1.820744959760474465326e-05,
                           0.001980085571459185961068, 0.08620603607175353187053, 1.639752345022622508324,
                           14.09128536603988103654, 54.38767190478729381869, 89.87721930359226508215,
                           56.82088311834484017021, 10.64833043315921254871, 0.2662516941725678568872};
static const double Q[] = {8.428886671171877662393e-12, 1.620978215694127792274e-08, 5.982181365559906595947e-06,
                           0.0007228155520336305132886, 0.03504304307286995796976, 0.7493371046173917653119,
                           7.360545721985147716003, 33.33226961185851639599, 67.36522959082591820398,
                           55.95126546159139995644, 15.97932098307380530652};

/* Words k - 2^31 of one block of four dimensions, the state in 64 bits as the machine has it. */
static void words_of(int32_t (*restrict words)[LANES], uint64_t seed, uint64_t first, uint64_t block)
{
    for (int i = 0; i < LANES; i++) {
        const uint64_t low = 0xFFFFFFFFu;
        uint64_t path = first + i, c0 = path & low, c1 = path >> 32, c2 = block, c3 = 0;
        uint32_t key0 = (uint32_t)seed, key1 = (uint32_t)(seed >> 32);
#pragma GCC unroll 10
        for (int round = 0; round < 10; round++) {
            uint64_t p0 = 0xD2511F53u * (c0 & low), p1 = 0xCD9E8D57u * (c2 & low);
            c0 = (p1 >> 32) ^ c1 ^ key0, c1 = p1;
            c2 = (p0 >> 32) ^ c3 ^ key1, c3 = p0;
            key0 += 0x9E3779B9u, key1 += 0xBB67AE85u;
        }
        words[0][i] = (int32_t)(uint32_t)c0 ^ INT32_MIN, words[1][i] = (int32_t)(uint32_t)c1 ^ INT32_MIN;
        words[2][i] = (int32_t)(uint32_t)c2 ^ INT32_MIN, words[3][i] = (int32_t)(uint32_t)c3 ^ INT32_MIN;
    }
}

static double tail_normal(int32_t word)
{
    double s = (word + 0.5) * 0x1p-31, r = sqrt(-log(0.5 - 0.5 * fabs(s))) - 1.6;
    double p = 2.27238449892691845833e-2 + r * 7.74545014278341407640e-4;
    p = 1.27045825245236838258 + r * (2.41780725177450611770e-1 + r * p);
    p = 5.76949722146069140550 + r * (3.64784832476320460504 + r * p);
    p = 1.42343711074968357734 + r * (4.63033784615654529590 + r * p);
    double q = 5.47593808499534494600e-4 + r * 1.05075007164441684324e-9;
    q = 1.48103976427480074590e-1 + r * (1.51986665636164571966e-2 + r * q);
    q = 1.67638483018380384940 + r * (6.89767334985100004550e-1 + r * q);
    q = 1.0 + r * (2.05319162663775882187 + r * q);
    return s > 0 ? p / q : -p / q;
}

static void normals_of(double *restrict z, const int32_t *restrict words)
{
    for (int i = 0; i < LANES; i++) {
        double s = (words[i] + 0.5) * 0x1p-31, t = 1.0 - s * s, u = t * t;
        double pe = ((((P[10] * u + P[8]) * u + P[6]) * u + P[4]) * u + P[2]) * u + P[0];
        double po = ((((P[11] * u + P[9]) * u + P[7]) * u + P[5]) * u + P[3]) * u + P[1];
        double qe = ((((Q[10] * u + Q[8]) * u + Q[6]) * u + Q[4]) * u + Q[2]) * u + Q[0];
        double qo = ((((u + Q[9]) * u + Q[7]) * u + Q[5]) * u + Q[3]) * u + Q[1];
        z[i] = s * (pe + t * po) / (qe + t * qo);
    }
    const int32_t edge = (int32_t)(0x1p31 * 0.99498743710662);
    for (int start = 0; start < LANES; start += CHUNK) {
        int far = 0;
        for (int i = start; i < start + CHUNK; i++)
            far |= (words[i] ^ (words[i] >> 31)) > edge;
        if (far)
            for (int i = start; i < start + CHUNK; i++)
                if ((words[i] ^ (words[i] >> 31)) > edge)
                    z[i] = tail_normal(words[i]);
    }
}

static inline double exponential(double x)
{
#ifdef LIBRARY_EXP
    return exp(x);
#else
    /* for |x| < 708; -ffast-math would cancel the rounding trick, so the integer goes through a conversion */
    double k = __builtin_nearbyint(x * 1.4426950408889634);
    double r = (x - k * 6.93147180369123816490e-01) - k * 1.90821492927058770002e-10, r2 = r * r, r4 = r2 * r2;
    double low = (0.5 + r * 0.16666666666667069806) + r2 * (0.041666666666618971234 + r * 0.0083333333329669548946);
    double high = (0.0013888888919859524612 + r * 0.00019841270771247752987)
                  + r2 * (0.00002480151778925905703 + r * 2.7556395564938828394e-6)
                  + r4 * (2.7621413452613798723e-7 + r * 2.5388277094897738076e-8);
    double power = (1.0 + r) + r2 * (low + r4 * high);
    int64_t bits, n = (int64_t)(int32_t)k;
    memcpy(&bits, &power, 8);
    bits += (int64_t)((uint64_t)n << 52);
    memcpy(&power, &bits, 8);
    return power;
#endif
}

/* Sum of the discounted payoffs of paths first .. first + paths - 1; paths a multiple of LANES, dates of four. */
double asian(uint64_t seed, uint64_t first, int64_t paths, int dates, double spot, double strike, double drift,
             double deviation, double discount)
{
    int32_t words[4][LANES];
    double z[LANES], x[LANES], sum[LANES], total = 0;
    for (int64_t done = 0; done < paths; done += LANES) {
        for (int i = 0; i < LANES; i++)
            x[i] = log(spot), sum[i] = 0;
        for (int date = 0; date < dates; date++) {
            if (date % 4 == 0)
                words_of(words, seed, first + done, date / 4);
            normals_of(z, words[date % 4]);
            for (int i = 0; i < LANES; i++) {
                x[i] += drift + deviation * z[i];
                sum[i] += exponential(x[i]);
            }
        }
        for (int i = 0; i < LANES; i++)
            total += discount * fmax(sum[i] / dates - strike, 0.0);
    }
    return total;
}
