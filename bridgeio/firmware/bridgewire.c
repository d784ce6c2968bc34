/* bridgewire: see bridgewire.h. A frame is COBS(payload + CRC, low byte first) 00; payloads are little-endian
 * and start with kind, seq and ms. SPDX-License-Identifier: MIT
 *
 * The one trick: the payload is written at out[1] and stuffed where it lies. The zero put at out[0] is replaced
 * like every other, so the stuffing needs no second buffer. A further kind is one function: open_frame, its
 * fields in wire order, close_frame. A payload must stay at or below 250 bytes.
 */
#include "bridgewire.h"

#define KIND_TALLY 0x11
#define KIND_NAMEPLATE 0x12
#define KIND_CREST 0x13
#define KIND_REMARK 0x14
#define KIND_WIDE_TALLY 0x15
#define KIND_CONDITIONS 0x16
#define KIND_WIDE_CREST 0x17

static uint8_t *put16(uint8_t *at, uint16_t value)
{
    *at++ = (uint8_t)value;
    *at++ = (uint8_t)(value >> 8);
    return at;
}

static uint8_t *put32(uint8_t *at, uint32_t value)
{
    return put16(put16(at, (uint16_t)value), (uint16_t)(value >> 16));
}

static uint8_t *open_frame(struct bw_line *line, uint8_t *out, uint8_t kind, uint32_t ms)
{
    *out++ = 0;
    *out++ = kind;
    *out++ = line->seq++;
    return put32(out, ms);
}

/* The polynomial's taps are 12 and 5 apart, so a whole byte folds in at once with two nibble shifts: no table,
 * no loop over bits. CRC-16/CCITT-FALSE: start 0xFFFF, polynomial 0x1021. Written with bytes because the small
 * machines have no others. */
static uint16_t crc_step(uint16_t crc, uint8_t byte)
{
    uint8_t fold = (uint8_t)((crc >> 8) ^ byte);
    uint8_t high, low;

    fold ^= (uint8_t)(fold >> 4);
    high = (uint8_t)((uint8_t)crc ^ (uint8_t)(fold << 4) ^ (uint8_t)(fold >> 3));
    low = (uint8_t)(fold ^ (uint8_t)(fold << 5));
    return (uint16_t)((uint16_t)high << 8 | low);
}

/* Check and stuff the bytes from out to end; return the length with the delimiter. */
static uint8_t close_frame(uint8_t *out, uint8_t *end)
{
    uint16_t crc = 0xFFFF;
    uint8_t gap = 1;
    uint8_t *at;

    for (at = out + 1; at != end; ++at)
        crc = crc_step(crc, *at);
    end = put16(end, crc);
    *end = 0;
    /* From the back, so that the distance to the next zero is known when a zero is met. */
    for (at = end; at != out; ++gap)
        if (*--at == 0) {
            *at = gap;
            gap = 0;
        }
    return (uint8_t)(end - out + 1);
}

static uint8_t take_owed(struct bw_line *line, uint8_t flags)
{
    flags |= line->owed;
    line->owed = 0;
    return flags;
}

uint8_t bw_put_tally(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_tally *tally)
{
    uint8_t *at = open_frame(line, out, KIND_TALLY, ms);

    at = put16(at, tally->forward);
    at = put16(at, tally->reflected);
    *at++ = take_owed(line, tally->flags);
    return close_frame(out, at);
}

uint8_t bw_put_crest(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_crest *crest)
{
    uint8_t *at = open_frame(line, out, KIND_CREST, ms);

    at = put16(at, crest->forward_mean);
    at = put16(at, crest->reflected_mean);
    at = put16(at, crest->forward_crest);
    at = put16(at, crest->reflected_at_crest);
    at = put16(at, crest->conversions);
    *at++ = take_owed(line, crest->flags);
    return close_frame(out, at);
}

uint8_t bw_put_nameplate(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_nameplate *plate)
{
    uint8_t *at = open_frame(line, out, KIND_NAMEPLATE, ms);
    uint8_t i;

    *at++ = plate->minor;
    *at++ = plate->boot;
    at = put32(at, plate->device_id);
    at = put16(at, plate->period_ms);
    at = put16(at, plate->summed);
    at = put32(at, plate->full_scale);
    at = put16(at, plate->reference_mv);
    *at++ = plate->features;
    at = put16(at, plate->bridge_file_id);
    at = put16(at, plate->firmware_version);
    for (i = 0; i < BW_NAME_BYTES; ++i)
        *at++ = (uint8_t)plate->name[i];
    return close_frame(out, at);
}

uint8_t bw_put_remark(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_remark *remark)
{
    uint8_t *at = open_frame(line, out, KIND_REMARK, ms);
    const char *text = remark->text;
    uint8_t *length;

    *at++ = remark->code;
    at = put32(at, remark->argument);
    length = at++;
    for (*length = 0; text && *text && *length < BW_TEXT_BYTES; ++*length)
        *at++ = (uint8_t)*text++;
    return close_frame(out, at);
}

uint8_t bw_put_conditions(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_conditions *conditions)
{
    uint8_t *at = open_frame(line, out, KIND_CONDITIONS, ms);

    at = put16(at, (uint16_t)conditions->temperature_c100);
    at = put16(at, conditions->supply_mv);
    at = put32(at, conditions->frequency_hz);
    return close_frame(out, at);
}

uint8_t bw_put_wide_tally(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_wide_tally *tally)
{
    uint8_t *at = open_frame(line, out, KIND_WIDE_TALLY, ms);

    at = put32(at, tally->forward);
    at = put32(at, tally->reflected);
    *at++ = take_owed(line, tally->flags);
    return close_frame(out, at);
}

uint8_t bw_put_wide_crest(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_wide_crest *crest)
{
    uint8_t *at = open_frame(line, out, KIND_WIDE_CREST, ms);

    at = put32(at, crest->forward_mean);
    at = put32(at, crest->reflected_mean);
    at = put32(at, crest->forward_crest);
    at = put32(at, crest->reflected_at_crest);
    at = put16(at, crest->conversions);
    *at++ = take_owed(line, crest->flags);
    return close_frame(out, at);
}

void bw_note_dropped(struct bw_line *line)
{
    line->owed |= BW_DROPPED;
}
