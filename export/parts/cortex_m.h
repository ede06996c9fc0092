/* Tables lie in program memory, which is read like any other. */
#define PART_TABLE
#define PART_BYTE(at) (*(at))

/* The address below which the stack grows. */
static inline unsigned char *part_stack(void)
{
    unsigned char *at;
    __asm__ volatile("mov %0, sp" : "=r"(at));
    return at;
}
