/* bridge: two detectors on an ATmega328P at 16 MHz, told to the host as counts.
 *
 * One rule: the timer owns the time. It starts every conversion, so tallies are exactly PERIOD_MS apart and their
 * `ms` is the timer's; whatever the serial line does can delay a frame, never a measurement.
 *
 * Two interrupts measure (timer starts, converter sums), one sends, and the main loop packs between naps. Every
 * choice is in board.h. SPDX-License-Identifier: MIT
 */
#include <avr/eeprom.h>
#include <avr/interrupt.h>
#include <avr/io.h>
#include <avr/sleep.h>
#include <avr/wdt.h>
#include <stdint.h>
#include <util/delay.h>

#include "board.h"
#include "bridgewire.h"

#define FIRMWARE_VERSION 1

#define FORWARD 0
#define REFLECTED 1

#define SLOTS (2 * SUMMED)
#define TOP_CODE 1023
#define SLOT_CYCLES (F_CPU / 1000 * PERIOD_MS / SLOTS)

#define CONVERSION_CYCLES (14 * 128UL) /* 13 converter clocks and the wait for the first, prescaler 128 */
#define DIVISOR ((F_CPU + 4 * BAUD) / (8 * BAUD))
#define TRUE_BAUD (F_CPU / 8 / DIVISOR)

#if F_CPU / 1000 * PERIOD_MS % SLOTS != 0 || SLOT_CYCLES > 65536
#error "PERIOD_MS cannot be split into 2 * SUMMED equal steps of the timer"
#endif
#if SLOT_CYCLES < CONVERSION_CYCLES + 400
#error "PERIOD_MS is too short for 2 * SUMMED conversions"
#endif
#if SUMMED % 2 != 0 || SUMMED > 64
#error "SUMMED must be even and at most 64"
#endif
#if TRUE_BAUD * 1000 > BAUD * 1025 || TRUE_BAUD * 1000 < BAUD * 975
#error "the serial clock cannot meet BAUD within 2.5 %"
#endif
#if CONDITIONS_S * 1000UL / PERIOD_MS > 65535
#error "CONDITIONS_S is too long for a count of 16 bits"
#endif

_Static_assert(sizeof BRIDGE_NAME <= BW_NAME_BYTES + 1, "BRIDGE_NAME has more than 12 bytes");

/* ---- measuring ------------------------------------------------------------------------------------------- */

/* What one tally's worth of conversions came to. */
struct stretch {
    uint32_t ms;
    uint16_t sum[2];
    uint16_t crest[2]; /* the highest forward conversion and the reflected one of the same pair */
    uint8_t clipped;
};

/* Handed from the converter's interrupt to await_stretch. Were one ever not fetched in time, `ms` would show it. */
static struct stretch finished;
static volatile uint8_t ready;

/* F R R F F R R F ...: neighbours make a pair, and both sums have the same mean instant. */
static inline uint8_t channel_of(uint8_t slot)
{
    return (slot + 1) & 2 ? REFLECTED : FORWARD;
}

static inline void select_input(uint8_t channel)
{
    ADMUX = REFERENCE | (channel == FORWARD ? FORWARD_INPUT : REFLECTED_INPUT);
}

ISR(TIMER1_COMPA_vect)
{
    ADCSRA |= _BV(ADSC);
}

static inline void finish(struct stretch *running)
{
    running->ms += PERIOD_MS;
    finished = *running;
    ready = 1;
    running->sum[FORWARD] = running->sum[REFLECTED] = 0;
    running->crest[FORWARD] = 0;
    running->clipped = 0;
}

ISR(ADC_vect)
{
    static struct stretch running;
    static uint16_t pair[2];
    static uint8_t slot;
    uint8_t channel = channel_of(slot);
    uint16_t code = ADC; /* before the input is switched */

    running.sum[channel] += code;
    pair[channel] = code;
    if (code >= TOP_CODE)
        running.clipped |= channel == FORWARD ? BW_FORWARD_CLIPPED : BW_REFLECTED_CLIPPED;
    if ((slot & 1) && pair[FORWARD] >= running.crest[FORWARD]) {
        running.crest[FORWARD] = pair[FORWARD];
        running.crest[REFLECTED] = pair[REFLECTED];
    }
    if (++slot == SLOTS) {
        slot = 0;
        finish(&running);
    }
    select_input(channel_of(slot)); /* now, so that it has the rest of the slot to settle */
}

static void start_measuring(void)
{
    DIDR0 = _BV(FORWARD_INPUT) | _BV(REFLECTED_INPUT);
    select_input(FORWARD);
    _delay_ms(50); /* the capacitor at AREF charges through some 30 kilohm inside the chip */
    ADCSRA = _BV(ADEN) | _BV(ADSC) | _BV(ADPS2) | _BV(ADPS1) | _BV(ADPS0);
    while (ADCSRA & _BV(ADSC))
        ; /* the first conversion after a start is worth nothing */
    ADCSRA |= _BV(ADIF) | _BV(ADIE);

    OCR1A = SLOT_CYCLES - 1;
    TIMSK1 = _BV(OCIE1A);
    TCCR1B = _BV(WGM12) | _BV(CS10);
}

static void await_stretch(struct stretch *taken)
{
    cli();
    while (!ready) {
        sleep_enable();
        sei(); /* takes effect after the next instruction: no interrupt slips in before the nap */
        sleep_cpu();
        sleep_disable();
        cli();
    }
    ready = 0;
    *taken = finished;
    sei();
}

/* ---- sending --------------------------------------------------------------------------------------------- */

#define RING_BYTES 128 /* a power of two; one frame of each kind the example sends makes 113 */

static uint8_t ring[RING_BYTES];
static volatile uint8_t ring_in, ring_out;

ISR(USART_UDRE_vect)
{
    uint8_t out = ring_out;

    if (out == ring_in) {
        UCSR0B &= (uint8_t)~_BV(UDRIE0);
    } else {
        UDR0 = ring[out];
        ring_out = (out + 1) % RING_BYTES;
    }
}

static void start_sending(void)
{
    UCSR0A = _BV(U2X0); /* before the divisor that counts on it */
    UBRR0 = DIVISOR - 1;
    UCSR0C = _BV(UCSZ01) | _BV(UCSZ00);
    UCSR0B = _BV(TXEN0);
    UDR0 = 0; /* a lone delimiter ends whatever was on the line before */
}

/* Whole frames only: half a frame would cost the host the next one too. */
static void send(struct bw_line *line, const uint8_t *frame, uint8_t length)
{
    uint8_t in = ring_in;

    if (length > (uint8_t)(ring_out - in - 1) % RING_BYTES) {
        bw_note_dropped(line);
        return;
    }
    for (; length; --length) {
        ring[in] = *frame++;
        in = (in + 1) % RING_BYTES;
    }
    ring_in = in;
    UCSR0B |= _BV(UDRIE0);
}

/* ---- what to say, and when ------------------------------------------------------------------------------- */

static uint8_t next_boot(void)
{
    uint8_t boot = eeprom_read_byte((const uint8_t *)0) + 1;

    if (boot == 0) /* 0 stands for "not known" */
        boot = 1;
    eeprom_write_byte((uint8_t *)0, boot);
    return boot;
}

/* The chip's own note of what started it; where a boot loader has wiped it out, the cause is not known. */
static uint8_t start_cause(void)
{
    uint8_t noted = MCUSR;

    MCUSR = 0;     /* or the next start would show this cause too */
    wdt_disable(); /* a watchdog that has struck runs on, at its shortest */
    if (noted & _BV(PORF)) /* first: while the power rises the others may be set as well */
        return BW_REMARK_STARTED_BY_POWER;
    if (noted & _BV(BORF))
        return BW_REMARK_STARTED_BY_BROWN_OUT;
    if (noted & _BV(WDRF))
        return BW_REMARK_STARTED_BY_WATCHDOG;
    return noted & _BV(EXTRF) ? BW_REMARK_STARTED_BY_RESET_PIN : BW_REMARK_STARTED;
}

/* Three nameplates in the first second, for a host that is waiting; then one every two seconds. */
static uint8_t nameplate_due(void)
{
    static uint8_t sent;
    static uint16_t wait_ms;

    if (wait_ms > PERIOD_MS) {
        wait_ms -= PERIOD_MS;
        return 0;
    }
    wait_ms = 2000;
    if (sent < 2) {
        wait_ms = 300;
        ++sent;
    }
    return 1;
}

#if CREST_TALLIES
/* Adds a tally to the crest under way; returns the crest when that completes it, else nothing. */
static const struct bw_crest *crest_with(const struct stretch *now)
{
    static struct bw_crest crest;
    static uint32_t sum[2];
    static uint8_t tallies;

    if (tallies == 0) {
        sum[FORWARD] = sum[REFLECTED] = CREST_TALLIES / 2; /* rounds the means */
        crest.forward_crest = 0;
        crest.flags = 0;
    }
    sum[FORWARD] += now->sum[FORWARD];
    sum[REFLECTED] += now->sum[REFLECTED];
    crest.flags |= now->clipped;
    if (SUMMED * now->crest[FORWARD] >= crest.forward_crest) {
        crest.forward_crest = SUMMED * now->crest[FORWARD];
        crest.reflected_at_crest = SUMMED * now->crest[REFLECTED];
    }
    if (++tallies < CREST_TALLIES)
        return 0;
    tallies = 0;
    crest.conversions = SUMMED * CREST_TALLIES;
    crest.forward_mean = sum[FORWARD] / CREST_TALLIES;
    crest.reflected_mean = sum[REFLECTED] / CREST_TALLIES;
    return &crest;
}
#endif

#if CONDITIONS_S
/* Returns the conditions at once, then every CONDITIONS_S seconds; in between nothing. */
static const struct bw_conditions *conditions_if_due(void)
{
    static struct bw_conditions conditions;
    static uint16_t wait;

    if (wait--)
        return 0;
    wait = CONDITIONS_S * 1000UL / PERIOD_MS - 1;
    conditions.temperature_c100 = TEMPERATURE_C100;
    conditions.supply_mv = SUPPLY_MV;
    conditions.frequency_hz = FREQUENCY_HZ;
    return &conditions;
}
#endif

int main(void)
{
    struct bw_nameplate plate = {
        .device_id = DEVICE_ID,
        .period_ms = PERIOD_MS,
        .summed = SUMMED,
        .full_scale = (uint32_t)SUMMED * TOP_CODE,
        .reference_mv = REFERENCE_MV,
        .features = (CREST_TALLIES ? BW_SENDS_CRESTS : 0) | (CONDITIONS_S ? BW_SENDS_CONDITIONS : 0),
        .bridge_file_id = BRIDGE_FILE_ID,
        .firmware_version = FIRMWARE_VERSION,
        .name = BRIDGE_NAME,
    };
    struct bw_remark started = {.code = start_cause()};
    struct bw_line line = {0, 0};
    struct bw_tally tally;
    struct stretch now;
    uint8_t frame[BW_LONGEST_BYTES];

    start_sending();
    plate.boot = next_boot();
    start_measuring();
    for (;;) {
        await_stretch(&now);
        if (nameplate_due())
            send(&line, frame, bw_put_nameplate(&line, frame, now.ms, &plate));
        if (started.code) { /* once, behind the nameplate: who speaks, then what there is to say */
            send(&line, frame, bw_put_remark(&line, frame, now.ms, &started));
            started.code = 0;
        }
#if CONDITIONS_S
        const struct bw_conditions *conditions = conditions_if_due();
        if (conditions)
            send(&line, frame, bw_put_conditions(&line, frame, now.ms, conditions));
#endif
        tally.forward = now.sum[FORWARD];
        tally.reflected = now.sum[REFLECTED];
        tally.flags = now.clipped;
        send(&line, frame, bw_put_tally(&line, frame, now.ms, &tally));
#if CREST_TALLIES
        const struct bw_crest *crest = crest_with(&now);
        if (crest)
            send(&line, frame, bw_put_crest(&line, frame, now.ms, crest));
#endif
    }
}
