/* What the floors share. numbers.h holds the model's numbers as macros, lists in braces. */
#include "numbers.h"

#include <stdint.h>

#if defined(__AVR__)
#include <avr/pgmspace.h>
#define TABLE PROGMEM
#define READ_REAL(at) pgm_read_float(&(at))
#define READ_64(at) ((int64_t)(uint32_t)pgm_read_dword(&(at)) | (int64_t)(uint64_t)pgm_read_dword((const char *)&(at) + 4) << 32)
#define READ_32(at) ((int32_t)pgm_read_dword(&(at)))
#define READ_16(at) ((int16_t)pgm_read_word(&(at)))
#define READ_U16(at) pgm_read_word(&(at))
#define READ_8(at) pgm_read_byte(&(at))
#else
#define TABLE
#define READ_REAL(at) (at)
#define READ_64(at) (at)
#define READ_32(at) (at)
#define READ_16(at) (at)
#define READ_U16(at) (at)
#define READ_8(at) (at)
#endif

enum { INPUTS = 8, FAULT = -2, NO_CALL = -1 };
