/* cycles: what packing one tally costs on the chip, and that the chip packs the same bytes as the host.
 *
 * Packs tallies made of a little generator's numbers between two marks the harness times, and sends each frame.
 * The marks around nothing come first: their own cost. Wide tallies and wide crests, which the example never sends,
 * follow untimed. SPDX-License-Identifier: MIT
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

/* Any bytes, each left out at even odds, so that zeros come in every pattern. */
static void fill(void *thing, uint8_t size)
{
    static uint32_t state = 2463534242UL;
    uint8_t *byte = thing;

    for (; size; --size) {
        uint32_t value = next(&state);
        *byte++ = value & 0x100 ? (uint8_t)value : 0;
    }
}

static void send(const uint8_t *frame, uint8_t length)
{
    for (; length; --length) {
        while (!(UCSR0A & _BV(UDRE0)))
            ;
        UDR0 = *frame++;
    }
}

int main(void)
{
    struct bw_line line = {0, 0};
    struct bw_tally tally;
    struct bw_wide_tally wide;
    struct bw_wide_crest crest;
    uint8_t frame[BW_LONGEST_BYTES];
    uint32_t ms;
    uint16_t round;
    uint8_t length;

    UCSR0A = _BV(U2X0);
    UBRR0 = 0;
    UCSR0B = _BV(TXEN0);
    GPIOR0 = 1;
    GPIOR0 = 2;
    for (round = 0; round < ROUNDS; ++round) {
        fill(&ms, sizeof ms);
        fill(&tally, sizeof tally);
        GPIOR0 = 1;
        length = bw_put_tally(&line, frame, ms, &tally);
        GPIOR0 = 2;
        send(frame, length);
    }
    for (round = 0; round < ROUNDS; ++round) {
        fill(&wide, sizeof wide);
        fill(&crest, sizeof crest);
        send(frame, bw_put_wide_tally(&line, frame, ms, &wide));
        send(frame, bw_put_wide_crest(&line, frame, ms, &crest));
    }
    for (;;)
        ;
}
