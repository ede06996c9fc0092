/* binary32 by hand: as little C as does the job with the same bits. */
#include "floor.h"

static const TABLE float low[INPUTS] = LOW, high[INPUTS] = HIGH, weight[INPUTS] = WEIGHT;

static inline float rounded(float product)
{
#if defined(__ARM_FEATURE_FMA)
    __asm__("" : "+t"(product));
#endif
    return product;
}

static inline float sum(const float *x)
{
    float z = INTERCEPT;
    int i;
    for (i = 0; i < INPUTS; i++) {
        if (!(x[i] >= low[i] && x[i] <= high[i])) {
            return __builtin_nanf("");
        }
        z += rounded(weight[i] * x[i]);
    }
    return z;
}

RESULT call(const float *x);

#if defined(LOG_ODDS)
RESULT call(const float *x)
{
    return sum(x);
}
#elif defined(DECIDE)
RESULT call(const float *x)
{
    const float z = sum(x);
    return z != z ? FAULT : z >= THRESHOLD;
}
#elif defined(CHECK_INPUTS)
RESULT call(const float *x)
{
    int i;
    for (i = 0; i < INPUTS; i++) {
        if (!(x[i] >= low[i] && x[i] <= high[i])) {
            return i + 1;
        }
    }
    return 0;
}
#else
static const TABLE float coefficient[DEGREE + 1] = COEFFICIENT;

RESULT call(const float *x)
{
    const float z = sum(x);
    float t = z, k, r, e = 0.0f;
    uint32_t bits;
    int n;
    if (z != z) {
        return z;
    }
    __builtin_memcpy(&bits, &t, 4); /* t = -abs(z) */
    bits |= 0x80000000;
    __builtin_memcpy(&t, &bits, 4);
    if (t >= FLOOR) {
        k = (rounded(t * INV_LN2) + 12582912.0f) - 12582912.0f;
        r = (t - rounded(k * LN2_HIGH)) - rounded(k * LN2_LOW);
        e = coefficient[DEGREE];
        for (n = DEGREE - 1; n >= 0; n--) {
            e = rounded(e * r) + coefficient[n];
        }
        __builtin_memcpy(&bits, &e, 4); /* times 2^k; e is normal and stays so */
        bits += (uint32_t)(int)k << 23;
        __builtin_memcpy(&e, &bits, 4);
    }
    return (z >= 0.0f ? 1.0f : e) / (1.0f + e);
}
#endif
