/* int32 by hand: as little C as does the job with the same bits. */
#include "floor.h"

static const int32_t low[INPUTS] TABLE = LOW, high[INPUTS] TABLE = HIGH, datum[INPUTS] TABLE = DATUM;
static const int32_t weight[INPUTS] TABLE = WEIGHT;
static const uint8_t shift[INPUTS] TABLE = SHIFT;

/* The accumulator; its least number on a fault. */
static inline int64_t sum(const int32_t *x)
{
    int64_t z = INTERCEPT;
    int i;
    for (i = 0; i < INPUTS; i++) {
        if (x[i] < READ_32(low[i]) || x[i] > READ_32(high[i])) {
            return INT64_MIN;
        }
        z += ((int64_t)READ_32(weight[i]) * (x[i] - READ_32(datum[i]))) << READ_8(shift[i]);
    }
    return z;
}

RESULT call(const int32_t *x);

#if defined(LOG_ODDS)
RESULT call(const int32_t *x)
{
    return sum(x);
}
#elif defined(DECIDE)
RESULT call(const int32_t *x)
{
    const int64_t z = sum(x);
    return z == INT64_MIN ? FAULT : z >= THRESHOLD;
}
#elif defined(CHECK_INPUTS)
RESULT call(const int32_t *x)
{
    int i;
    for (i = 0; i < INPUTS; i++) {
        if (x[i] < READ_32(low[i]) || x[i] > READ_32(high[i])) {
            return i + 1;
        }
    }
    return 0;
}
#else
static const uint16_t node[NODES] TABLE = NODE;

RESULT call(const int32_t *x)
{
    const int64_t z = sum(x);
    uint64_t a;
    uint32_t i;
    int32_t q;
    if (z == INT64_MIN) {
        return 0xFFFF;
    }
    a = (uint64_t)(z < 0 ? -z : z) >> DROP;
    q = READ_U16(node[NODES - 1]);
    if (a < (uint64_t)(NODES - 1) << STEP) {
        i = (uint32_t)a >> STEP;
        q = READ_U16(node[i]);
        q += (int32_t)((READ_U16(node[i + 1]) - q) * (int32_t)((uint32_t)a & ((1UL << STEP) - 1)) + (1L << (STEP - 1))) >> STEP;
    }
    return (uint16_t)(z < 0 ? 32768 - q : q);
}
#endif
