#include <avr/io.h>
#include <avr/pgmspace.h>

/* Tables lie in program memory, which needs an instruction of its own to be read. */
#define PART_TABLE PROGMEM
#define PART_BYTE(at) pgm_read_byte(at)

/* The address below which the stack grows. */
static inline unsigned char *part_stack(void)
{
    return (unsigned char *)SP;
}
