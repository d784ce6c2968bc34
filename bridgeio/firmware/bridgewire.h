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
#define BW_LONGEST_BYTES BW_NAMEPLATE_BYTES

#define BW_NAME_BYTES 12

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

/* `ms` is the device time at the end of the last conversion in the frame. */
uint8_t bw_put_tally(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_tally *tally);
uint8_t bw_put_nameplate(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_nameplate *plate);
uint8_t bw_put_crest(struct bw_line *line, uint8_t *out, uint32_t ms, const struct bw_crest *crest);

/* Call this when a packed frame could not be sent: the next frame of counts says so. */
void bw_note_dropped(struct bw_line *line);

#ifdef __cplusplus
}
#endif

#endif
