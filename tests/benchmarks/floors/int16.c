/* int16 by hand: as little C as does the job with the same bits. */
#include "floor.h"

/* Of each input: low, high, datum, weight, shift. */
static const TABLE int16_t table[INPUTS * 5] = ROWS;

/* The accumulator; its least number on a fault. */
static inline int32_t sum(const int16_t *x)
{
    const TABLE int16_t *row = table;
    int32_t z = INTERCEPT;
    int i;
    for (i = 0; i < INPUTS; i++) {
        int16_t n = x[i];
        int32_t product;
        if (x[i] < *row++ || x[i] > *row++) {
            return INT32_MIN;
        }
        n -= *row++;
        product = (int32_t)n * *row++;
        z += product << *row++;
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
    static const TABLE int16_t low[INPUTS] = LOW, high[INPUTS] = HIGH;
    int i;
    for (i = 0; i < INPUTS; i++) {
        if (x[i] < low[i] || x[i] > high[i]) {
            return i + 1;
        }
    }
    return 0;
}
#else
static const TABLE uint16_t node[NODES] = NODE;

RESULT call(const int16_t *x)
{
    const int32_t z = sum(x);
    uint32_t a;
    uint16_t q;
    if (z == INT32_MIN) {
        return 0xFFFF;
    }
    a = (uint32_t)(z < 0 ? -z : z) >> DROP;
    q = node[NODES - 1];
    if (a < (uint32_t)(NODES - 1) << STEP) {
        const TABLE uint16_t *at = node + (a >> STEP);
        q = *at++;
        q += ((uint16_t)(*at - q) * (a & ((1UL << STEP) - 1)) + (1UL << (STEP - 1))) >> STEP;
    }
    return z < 0 ? 32768 - q : q;
}
#endif
