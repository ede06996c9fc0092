/* The largest error of the binary32 logistic, by trying every argument.
 *
 *     logistic_every_argument INV_LN2 LN2_HIGH LN2_LOW FLOOR C0 C1 ... CN
 *
 * Every |z| from 0 to infinity is tried with both signs, each operation rounded once to binary32. The reference is
 * binary64: e = exp(-|z|) by the C library (below 1 ulp there), 1 / (1 + e) and e / (1 + e); so each figure is good to
 * 2^-26 ulp. An ulp is the distance between neighbours in the binade of the larger of exact and computed value.
 *
 * Prints one line: worst ulps for z >= 0, for z < 0 and of the exponential (all for |z| <= -FLOOR), worst absolute
 * error, least exponential above the floor; then the arguments of the first four. Exit 1 where an argument beyond the
 * floor gives anything but 1 or 0.
 *
 * Build without contraction: cc -std=c99 -O2 -ffp-contract=off -pthread logistic_every_argument.c -lm
 */
#include <float.h>
#include <math.h>
#include <pthread.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#if FLT_EVAL_METHOD != 0
#error "float operations must round to float"
#endif

enum { THREADS = 2, MOST_COEFFICIENTS = 16 };

static float inv_ln2, ln2_high, ln2_low, least_t, coefficient[MOST_COEFFICIENTS];
static int degree;

typedef struct {
    double ulps[3];  /* z >= 0, z < 0, exponential */
    double absolute;
    float at[4];     /* the arguments of those four */
    float least;     /* least exponential above the floor */
    long wrong;      /* arguments beyond the floor whose result is not 1 or 0 */
    uint32_t first, beyond;
} work;

static float from_bits(uint32_t bits)
{
    float x;
    memcpy(&x, &bits, sizeof x);
    return x;
}

static float exponential(float t)
{
    if (t < least_t) {
        return 0.0f;
    }
    const float shifter = 12582912.0f; /* 1.5 * 2^23: adding it rounds to an integer, ties to even */
    float k = (t * inv_ln2 + shifter) - shifter;
    float r = (t - k * ln2_high) - k * ln2_low;
    float p = coefficient[degree];
    for (int i = degree - 1; i >= 0; i--) {
        p = p * r + coefficient[i];
    }
    return p * from_bits((uint32_t)(127 + (int)k) << 23);
}

/* Both positive and normal. */
static double in_ulps(double computed, double exact)
{
    double larger = computed > exact ? computed : exact;
    uint64_t bits;
    memcpy(&bits, &larger, sizeof bits);
    bits = (2046 - (bits >> 52) + 23) << 52; /* 2^(23 - exponent) */
    double per_ulp;
    memcpy(&per_ulp, &bits, sizeof per_ulp);
    return fabs(computed - exact) * per_ulp;
}

static void keep(double error, double *worst, float z, float *at)
{
    if (!(error <= *worst)) { /* NaN is kept too */
        *worst = error;
        *at = z;
    }
}

static void *try_all(void *argument)
{
    work *w = argument;
    for (uint32_t bits = w->first; bits != w->beyond; bits++) {
        float z = from_bits(bits);
        float e = exponential(-z);
        float d = 1.0f + e;
        float above = 1.0f / d, below = e / d;
        if (z > -least_t) {
            keep(exp(-(double)z), &w->absolute, z, &w->at[3]); /* an upper bound of the error of either sign */
            w->wrong += above != 1.0f || below != 0.0f;
            continue;
        }
        double exact_e = exp(-(double)z);
        double exact_above = 1.0 / (1.0 + exact_e), exact_below = exact_e / (1.0 + exact_e);
        keep(in_ulps(above, exact_above), &w->ulps[0], z, &w->at[0]);
        keep(in_ulps(below, exact_below), &w->ulps[1], -z, &w->at[1]);
        keep(in_ulps(e, exact_e), &w->ulps[2], -z, &w->at[2]);
        keep(fabs(above - exact_above), &w->absolute, z, &w->at[3]);
        keep(fabs(below - exact_below), &w->absolute, -z, &w->at[3]);
        w->least = e < w->least ? e : w->least;
    }
    return NULL;
}

int main(int count, char **argument)
{
    if (count < 7 || count > 5 + MOST_COEFFICIENTS) {
        fprintf(stderr, "usage: %s INV_LN2 LN2_HIGH LN2_LOW FLOOR C0 C1 ... CN\n", argument[0]);
        return 2;
    }
    inv_ln2 = strtof(argument[1], NULL);
    ln2_high = strtof(argument[2], NULL);
    ln2_low = strtof(argument[3], NULL);
    least_t = strtof(argument[4], NULL);
    degree = count - 6;
    for (int i = 0; i <= degree; i++) {
        coefficient[i] = strtof(argument[5 + i], NULL);
    }

    /* Infinity is 0x7F800000. Many slices, since those beyond the floor take less time. */
    enum { SLICES = 256 };
    static work works[SLICES];
    const uint32_t beyond = 0x7F800001u, step = beyond / SLICES;
    work total = {.least = INFINITY};
    for (int s = 0; s < SLICES; s += THREADS) {
        pthread_t threads[THREADS];
        for (int j = 0; j < THREADS; j++) {
            work *w = &works[s + j];
            w->first = step * (uint32_t)(s + j);
            w->beyond = s + j == SLICES - 1 ? beyond : w->first + step;
            w->least = INFINITY;
            if (pthread_create(&threads[j], NULL, try_all, w) != 0) {
                return 2;
            }
        }
        for (int j = 0; j < THREADS; j++) {
            pthread_join(threads[j], NULL);
            work *w = &works[s + j];
            for (int i = 0; i < 3; i++) {
                keep(w->ulps[i], &total.ulps[i], w->at[i], &total.at[i]);
            }
            keep(w->absolute, &total.absolute, w->at[3], &total.at[3]);
            total.least = w->least < total.least ? w->least : total.least;
            total.wrong += w->wrong;
        }
    }
    printf("%.6f %.6f %.6f %.6e %a  %a %a %a %a\n", total.ulps[0], total.ulps[1], total.ulps[2], total.absolute,
           (double)total.least, (double)total.at[0], (double)total.at[1], (double)total.at[2], (double)total.at[3]);
    return total.wrong != 0;
}
