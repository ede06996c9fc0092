/* An ATmega328P under simavr: the UART for what is written, Timer 1 for cycles; asleep without interrupts is the end. */
#include "part.h"

#include <avr/interrupt.h>
#include <avr/sleep.h>

void exit(int status);

void put_char(char c)
{
    UCSR0A = 1 << U2X0;
    UBRR0 = 0;
    UCSR0B = 1 << TXEN0;
    while ((UCSR0A & (1 << UDRE0)) == 0) {
    }
    UDR0 = (uint8_t)c;
}

/* Called where main returns. */
void exit(int status)
{
    (void)status;
    while ((UCSR0A & (1 << UDRE0)) == 0) {
    }
    cli();
    for (;;) {
        sleep_mode();
    }
}

void start_count(void)
{
    TCCR1A = 0;
    TCCR1B = 0;
    TCNT1 = 0;
    TIFR1 = 1 << TOV1;
    TCCR1B = 1; /* on, by the processor's clock */
}

/* In cycles, up to twice the counter's 16 bits. */
uint32_t read_count(void)
{
    const uint16_t low = TCNT1;
    const uint32_t high = (TIFR1 & (1 << TOV1)) != 0 && low < 0x8000 ? 0x10000UL : 0;
    return high + low;
}
