/* cycles: what packing one tally costs on the chip, and that the chip packs the same bytes as the host.
 *
 * Packs tallies made of a little generator's numbers between two marks the harness times, and sends each frame.
 * The marks around nothing come first: their own cost. SPDX-License-Identifier: MIT
 */
#include <avr/io.h>
#include <avr/sleep.h>

#include "bridgewire.h"

#ifndef ROUNDS
#define ROUNDS 2000
#endif

static uint32_t next(uint32_t *state)
{
    *state ^= *state << 13;
    *state ^= *state >> 17;
    *state ^= *state << 5;
    return *state;
}

/* A number with each of its bytes left out at even odds, so that zeros come in every pattern. */
static uint32_t holed(uint32_t *state)
{
    uint32_t value = next(state);
    uint32_t holes = next(state);
    uint8_t i;

    for (i = 0; i < 4; ++i)
        if (holes >> i & 1)
            value &= ~((uint32_t)0xFF << 8 * i);
    return value;
}

int main(void)
{
    struct bw_line line = {0, 0};
    struct bw_tally tally;
    uint8_t frame[BW_TALLY_BYTES];
    uint32_t state = 2463534242UL, ms;
    uint16_t round;
    uint8_t length, i;

    UCSR0A = _BV(U2X0);
    UBRR0 = 0;
    UCSR0B = _BV(TXEN0);
    GPIOR0 = 1;
    GPIOR0 = 2;
    for (round = 0; round < ROUNDS; ++round) {
        ms = holed(&state);
        tally.forward = (uint16_t)holed(&state);
        tally.reflected = (uint16_t)holed(&state);
        tally.flags = (uint8_t)holed(&state);
        GPIOR0 = 1;
        length = bw_put_tally(&line, frame, ms, &tally);
        GPIOR0 = 2;
        for (i = 0; i < length; ++i) {
            while (!(UCSR0A & _BV(UDRE0)))
                ;
            UDR0 = frame[i];
        }
    }
    for (;;)
        ;
}
