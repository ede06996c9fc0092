/* The largest error of the binary64 logistic over many arguments drawn at random.
 *
 *     logistic_sampled COUNT SEED INV_LN2 LN2_HIGH LN2_LOW FLOOR C0 C1 ... CN
 *
 * COUNT arguments |z|, both signs of each, each operation rounded once to binary64. Reference: the C library's expl in
 * a type of at least 64 bits, so each figure is good to about 2^-9 ulp. A quarter of the arguments each: uniform in
 * [0, 8]; uniform down to the floor; any exponent from 2^-60 up; within 64 neighbours of a multiple of (ln 2) / 2,
 * where k changes or the result nears a power of two. An ulp is that of the larger of exact and computed value.
 *
 * Prints one line: worst ulps for z >= 0, for z < 0 and of the exponential, worst absolute error; then their arguments.
 *
 * Build without contraction: cc -std=c99 -O2 -ffp-contract=off logistic_sampled.c -lm
 */
#include <float.h>
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#if FLT_EVAL_METHOD != 0
#error "double operations must round to double"
#endif
#if LDBL_MANT_DIG < 64
#error "the reference needs a long double of 64 bits or more"
#endif

enum { MOST_COEFFICIENTS = 20 };

static double inv_ln2, ln2_high, ln2_low, least_t, coefficient[MOST_COEFFICIENTS];
static int degree;
static uint64_t state;

/* SplitMix64 (Steele, Lea and Flood 2014). */
static uint64_t draw(void)
{
    uint64_t x = state += 0x9E3779B97F4A7C15u;
    x = (x ^ (x >> 30)) * 0xBF58476D1CE4E5B9u;
    x = (x ^ (x >> 27)) * 0x94D049BB133111EBu;
    return x ^ (x >> 31);
}

static double from_bits(uint64_t bits)
{
    double x;
    memcpy(&x, &bits, sizeof x);
    return x;
}

static double exponential(double t)
{
    if (t < least_t) {
        return 0.0;
    }
    const double shifter = 6755399441055744.0; /* 1.5 * 2^52: adding it rounds to an integer, ties to even */
    double k = (t * inv_ln2 + shifter) - shifter;
    double r = (t - k * ln2_high) - k * ln2_low;
    double p = coefficient[degree];
    for (int i = degree - 1; i >= 0; i--) {
        p = p * r + coefficient[i];
    }
    return p * from_bits((uint64_t)(1023 + (int)k) << 52);
}

static double magnitude(uint64_t number)
{
    double unit = (double)(draw() >> 11) * 0x1p-53;
    uint64_t bits;
    double near;
    switch (number % 4) {
    case 0:
        return 8.0 * unit;
    case 1:
        return -least_t * unit;
    case 2:
        return ldexp(1.0 + unit, (int)(draw() % 69) - 60);
    default:
        near = (double)(1 + draw() % 2042) * 0.34657359027997264;
        memcpy(&bits, &near, sizeof bits);
        return from_bits(bits - 64 + draw() % 129);
    }
}

static double in_ulps(double computed, long double exact)
{
    int exponent;
    frexpl(computed > exact ? computed : exact, &exponent);
    return (double)ldexpl(fabsl(computed - exact), 53 - exponent);
}

static void keep(double error, double *worst, double z, double *at)
{
    if (!(error <= *worst)) { /* NaN is kept too */
        *worst = error;
        *at = z;
    }
}

int main(int count, char **argument)
{
    if (count < 9 || count > 7 + MOST_COEFFICIENTS) {
        fprintf(stderr, "usage: %s COUNT SEED INV_LN2 LN2_HIGH LN2_LOW FLOOR C0 C1 ... CN\n", argument[0]);
        return 2;
    }
    uint64_t wanted = strtoull(argument[1], NULL, 10);
    state = strtoull(argument[2], NULL, 10);
    inv_ln2 = strtod(argument[3], NULL);
    ln2_high = strtod(argument[4], NULL);
    ln2_low = strtod(argument[5], NULL);
    least_t = strtod(argument[6], NULL);
    degree = count - 8;
    for (int i = 0; i <= degree; i++) {
        coefficient[i] = strtod(argument[7 + i], NULL);
    }

    double ulps[3] = {0}, absolute = 0, at[4] = {0};
    for (uint64_t i = 0; i < wanted; i++) {
        double z = magnitude(i);
        if (z > -least_t) {
            continue;
        }
        double e = exponential(-z), d = 1.0 + e, above = 1.0 / d, below = e / d;
        long double exact_e = expl(-(long double)z);
        long double exact_above = 1.0L / (1.0L + exact_e), exact_below = exact_e / (1.0L + exact_e);
        keep(in_ulps(above, exact_above), &ulps[0], z, &at[0]);
        keep(in_ulps(below, exact_below), &ulps[1], -z, &at[1]);
        keep(in_ulps(e, exact_e), &ulps[2], -z, &at[2]);
        keep((double)fabsl(above - exact_above), &absolute, z, &at[3]);
        keep((double)fabsl(below - exact_below), &absolute, -z, &at[3]);
    }
    printf("%.6f %.6f %.6f %.6e  %a %a %a %a\n", ulps[0], ulps[1], ulps[2], absolute, at[0], at[1], at[2], at[3]);
    return 0;
}
