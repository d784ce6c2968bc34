/* bridgewire: what a bridge says on its serial line, packed into frames.
 *
 * One rule: it owns no memory. The running state and every buffer belong to the caller, so it fits beside any
 * sketch and takes no static RAM. C99; no float, no heap, no stdio.
 *
 * Each call packs one frame, delimiter included, and returns its length in bytes. All counts of one bridge are
 * in one unit, the tally's: a single conversion is multiplied by the conversions summed before it goes into a
 * crest.
 *
 * SPDX-License-Identifier: MIT
 */
#ifndef BRIDGEWIRE_H
#define BRIDGEWIRE_H

#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

/* Bytes on the wire, delimiter included: the room a caller must give. */
#define BW_TALLY_BYTES 15
#define BW_NAMEPLATE_BYTES 43
#define BW_CREST_BYTES 21
#define BW_REMARK_BYTES 40 /* with the longest text; 16 without any */
#define BW_WIDE_TALLY_BYTES 19
#define BW_CONDITIONS_BYTES 18
#define BW_WIDE_CREST_BYTES 29
#define BW_LONGEST_BYTES BW_NAMEPLATE_BYTES

#define BW_NAME_BYTES 12
#define BW_TEXT_BYTES 24

/* Flags of every frame that carries counts. */
#define BW_FORWARD_CLIPPED 0x01
#define BW_REFLECTED_CLIPPED 0x02
#define BW_KEY_ACTIVE 0x04
#define BW_REFERENCE_OUT 0x08
#define BW_DROPPED 0x80

/* Features a nameplate announces. */
#define BW_SENDS_CRESTS 0x01
#define BW_SENDS_CONDITIONS 0x02
#define BW_HAS_KEY_INPUT 0x04
#define BW_HAS_OWN_RESULT 0x08

/* Codes of a remark; 0x80 to 0xFF are your own. The argument, where there is one, stands behind. */
#define BW_REMARK_TEXT 0x00
#define BW_REMARK_STARTED 0x01 /* cause not known */
#define BW_REMARK_STARTED_BY_POWER 0x02
#define BW_REMARK_STARTED_BY_RESET_PIN 0x03
#define BW_REMARK_STARTED_BY_BROWN_OUT 0x04
#define BW_REMARK_STARTED_BY_WATCHDOG 0x05
#define BW_REMARK_STARTED_BY_SOFTWARE 0x06
#define BW_REMARK_SUPPLY_LOW 0x10         /* mV */
#define BW_REMARK_SUPPLY_GOOD 0x11        /* mV */
#define BW_REMARK_REFERENCE_OUT 0x12      /* mV, 0: not known */
#define BW_REMARK_REFERENCE_GOOD 0x13     /* mV, 0: not known */
#define BW_REMARK_OVERRUN 0x20            /* frames dropped since the start */
#define BW_REMARK_MISSED 0x21             /* conversions missed since the start */
#define BW_REMARK_CONVERTER_FAULT 0x22    /* the converter's own error word */
#define BW_REMARK_TEMPERATURE_LOST 0x23
#define BW_REMARK_PERIOD 0x30             /* the new period in ms */

#define BW_TEMPERATURE_UNKNOWN (-32767 - 1)

/* The state of one line. All zero at the start. */
struct bw_line {
    uint8_t seq;  /* of the next frame, whatever its kind */
    uint8_t owed; /* flags the next frame of counts carries besides its own */
};

/* One tally: sums of conversions, one per channel, over the same stretch of time. */
struct bw_tally {
    uint16_t forward;
    uint16_t reflected;
    uint8_t flags;
};

/* The means of a stretch, its highest single forward conversion, and the reflected one beside it. */
struct bw_crest {
    uint16_t forward_mean;
    uint16_t reflected_mean;
    uint16_t forward_crest;
    uint16_t reflected_at_crest;
    uint16_t conversions; /* per channel */
    uint8_t flags;
};

/* Who the bridge is. What is not known is 0. */
struct bw_nameplate {
    uint8_t minor;            /* of the wire's version; 0 today */
    uint8_t boot;             /* any number that differs from the last start's */
    uint32_t device_id;
    uint16_t period_ms;       /* from tally to tally; 0 when irregular */
    uint16_t summed;          /* conversions per channel in a tally */
    uint32_t full_scale;      /* the largest count a tally can hold */
    uint16_t reference_mv;
    uint8_t features;         /* BW_SENDS_..., BW_HAS_... */
    uint16_t bridge_file_id;
    uint16_t firmware_version;
    char name[BW_NAME_BYTES]; /* UTF-8, the rest zeros */
};

/* Something the bridge has to say. */
struct bw_remark {
    uint8_t code;      /* BW_REMARK_... */
    uint32_t argument; /* 0 where the code has none */
    const char *text;  /* UTF-8, ended by a zero; 0: none. What is beyond 24 bytes stays behind */
};

/* What surrounds the detectors. */
struct bw_conditions {
    int16_t temperature_c100; /* 0.01 degC, near the detectors; BW_TEMPERATURE_UNKNOWN */
    uint16_t supply_mv;       /* 0: not known, as below */
    uint32_t frequency_hz;    /* of the transmitter */
};

/* For converters of 18 to 24 bits, and for long sums: the same as above with wide counts. A bridge sends either
 * these or those. */
struct bw_wide_tally {
    uint32_t forward;
    uint32_t reflected;
    uint8_t flags;
};

struct bw_wide_crest {
    uint32_t forward_mean;
    uint32_t reflected_mean;
    uint32_t forward_crest;
    uint32_t reflected_at_crest;
    uint16_t conversions;
    uint8_t flags;
};

/* `ms` is the device time at the end of the last conversion in the frame; where there is none, that of packing. */
uint8_t bw_put_tally(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_tally *tally);
uint8_t bw_put_nameplate(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_nameplate *plate);
uint8_t bw_put_crest(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_crest *crest);
uint8_t bw_put_remark(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_remark *remark);
uint8_t bw_put_conditions(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_conditions *conditions);
uint8_t bw_put_wide_tally(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_wide_tally *tally);
uint8_t bw_put_wide_crest(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_wide_crest *crest);

/* Call this when a packed frame could not be sent: the next frame of counts says so. */
void bw_note_dropped(struct bw_line *line);

#ifdef __cplusplus
}
#endif

#endif
