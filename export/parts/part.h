/* What the programs here need of a part: somewhere to write, an end, a counter, and tables that do not fill the RAM. */
#ifndef PART_H
#define PART_H

#include <stdint.h>

#if defined(__AVR__)
#include "avr.h"
#else
#include "cortex_m.h"
#endif

void put_char(char c);

/* Starts the counter of instructions or cycles, from 0. */
void start_count(void);

/* How many since then, in the counter's own ticks. */
uint32_t read_count(void);

#endif
