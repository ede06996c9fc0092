/* Start-up code for a Cortex-M under QEMU: memory, FPU, main, and semihosting for what is written and for the end. */
#include "part.h"

extern uint32_t stack_top, data_load, data_start, data_end, bss_start, bss_end;

int main(void);
void start(void);

enum { WRITE_CHAR = 0x03, EXIT_WITH_STATUS = 0x20, APPLICATION_EXIT = 0x20026, FAULT_STATUS = 99 };

static void semihost(uint32_t operation, const void *argument)
{
    register uint32_t r0 __asm__("r0") = operation;
    register const void *r1 __asm__("r1") = argument;
    __asm__ volatile("bkpt 0xab" : "+r"(r0) : "r"(r1) : "memory");
}

static void leave(uint32_t status)
{
    const uint32_t block[2] = { APPLICATION_EXIT, status };
    semihost(EXIT_WITH_STATUS, block);
    for (;;) {
    }
}

static void fault(void)
{
    leave(FAULT_STATUS);
}

void start(void)
{
    volatile uint32_t *to;
    const uint32_t *from = &data_load;
#if defined(__ARM_FP)
    *(volatile uint32_t *)0xE000ED88 |= 0xFUL << 20; /* CPACR: the FPU on */
    __asm__ volatile("dsb\n\tisb");
#endif
    for (to = &data_start; to < &data_end; to++) {
        *to = *from++;
    }
    for (to = &bss_start; to < &bss_end; to++) {
        *to = 0;
    }
    leave((uint32_t)main());
}

typedef void (*handler)(void);
struct vectors {
    uint32_t *stack;
    handler handlers[15]; /* reset, NMI, hard fault, the other faults, none, supervisor call and so on */
};
extern const struct vectors vectors;
__attribute__((section(".vectors"), used)) const struct vectors vectors = {
    &stack_top, { start, fault, fault, fault, fault, fault, 0, 0, 0, 0, fault, fault, 0, fault, fault }
};

void put_char(char c)
{
    semihost(WRITE_CHAR, &c);
}

/* SysTick: control, reload, value. It counts down, 24 bits. */
static volatile uint32_t *const systick = (volatile uint32_t *)0xE000E010;

void start_count(void)
{
    systick[0] = 0;
    systick[1] = 0xFFFFFF;
    systick[2] = 0;
    systick[0] = 5; /* on, by the processor's clock */
    while (systick[2] == 0) {
    }
}

/* In ticks; what is counted here never fills the 24 bits. */
uint32_t read_count(void)
{
    return 0xFFFFFF - systick[2];
}
