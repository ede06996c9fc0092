/* What the floors share. numbers.h holds the model's numbers as macros, lists in braces. */
#include "numbers.h"

#include <stdint.h>

/* Where tables stand: on AVR in program memory, by the compiler's own named address space. */
#if defined(__AVR__)
#define TABLE __flash
#else
#define TABLE
#endif

enum { INPUTS = 8, FAULT = -2 };
