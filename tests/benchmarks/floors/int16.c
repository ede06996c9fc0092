/* int16 by hand: as little C as does the job with the same bits. */
#include "floor.h"

static const int16_t low[INPUTS] TABLE = LOW, high[INPUTS] TABLE = HIGH, datum[INPUTS] TABLE = DATUM;
static const int16_t weight[INPUTS] TABLE = WEIGHT;
static const uint8_t shift[INPUTS] TABLE = SHIFT;

/* The accumulator; its least number on a fault. */
static inline int32_t sum(const int16_t *x)
{
    int32_t z = INTERCEPT;
    int i;
    for (i = 0; i < INPUTS; i++) {
        if (x[i] < READ_16(low[i]) || x[i] > READ_16(high[i])) {
            return INT32_MIN;
        }
        z += (READ_16(weight[i]) * ((int32_t)x[i] - READ_16(datum[i]))) << READ_8(shift[i]);
    }
    return z;
}

RESULT call(const int16_t *x);

#if defined(LOG_ODDS)
RESULT call(const int16_t *x)
{
    return sum(x);
}
#elif defined(DECIDE)
RESULT call(const int16_t *x)
{
    const int32_t z = sum(x);
    return z == INT32_MIN ? FAULT : z >= THRESHOLD;
}
#elif defined(CHECK_INPUTS)
RESULT call(const int16_t *x)
{
    int i;
    for (i = 0; i < INPUTS; i++) {
        if (x[i] < READ_16(low[i]) || x[i] > READ_16(high[i])) {
            return i + 1;
        }
    }
    return 0;
}
#else
static const uint16_t node[NODES] TABLE = NODE;

RESULT call(const int16_t *x)
{
    const int32_t z = sum(x);
    uint32_t a, i;
    int32_t q;
    if (z == INT32_MIN) {
        return 0xFFFF;
    }
    a = (uint32_t)(z < 0 ? -z : z) >> DROP;
    i = a >> STEP;
    q = READ_U16(node[NODES - 1]);
    if (i < NODES - 1) {
        q = READ_U16(node[i]);
        q += (int32_t)((READ_U16(node[i + 1]) - q) * (int32_t)(a & ((1UL << STEP) - 1)) + (1L << (STEP - 1))) >> STEP;
    }
    return (uint16_t)(z < 0 ? 32768 - q : q);
}
#endif
