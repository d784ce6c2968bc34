/* board: everything about your bridge that the example has to be told. The one file to edit; each choice may also
 * be given to the compiler as -DNAME=value. README.md says what hangs on each.
 *
 * SPDX-License-Identifier: MIT
 */
#ifndef BOARD_H
#define BOARD_H

/* How the bridge introduces itself: at most 12 bytes, and any number you like as long as no other bridge of yours
 * has it (0: none given). */
#ifndef BRIDGE_NAME
#define BRIDGE_NAME "my bridge"
#endif
#ifndef DEVICE_ID
#define DEVICE_ID 0
#endif
/* The id that a fit wrote into the bridge file this board belongs to (0: none). */
#ifndef BRIDGE_FILE_ID
#define BRIDGE_FILE_ID 0
#endif

/* Analogue inputs, ADC0 to ADC5. */
#ifndef FORWARD_INPUT
#define FORWARD_INPUT 0
#endif
#ifndef REFLECTED_INPUT
#define REFLECTED_INPUT 1
#endif

/* What the converter measures against, and its voltage. Never choose the other two while a voltage is wired to
 * the AREF pin: they drive that pin from inside. */
#define REFERENCE_AT_AREF 0x00
#define REFERENCE_SUPPLY 0x40
#define REFERENCE_INTERNAL 0xC0
#ifndef REFERENCE
#define REFERENCE REFERENCE_INTERNAL
#endif
#ifndef REFERENCE_MV
#if REFERENCE == REFERENCE_INTERNAL
#define REFERENCE_MV 1100
#elif REFERENCE == REFERENCE_SUPPLY
#define REFERENCE_MV 5000
#else
#error "REFERENCE_MV: what voltage is wired to AREF?"
#endif
#endif

/* Any rate the serial clock meets within 2.5 %. */
#ifndef BAUD
#define BAUD 115200UL
#endif

/* A tally is SUMMED conversions of each input, spread evenly over PERIOD_MS. SUMMED must be even (order F R R F)
 * and at most 64, or a sum outgrows its 16 bits. */
#ifndef PERIOD_MS
#define PERIOD_MS 10
#endif
#ifndef SUMMED
#define SUMMED 16
#endif

/* A crest frame every so many tallies; 0: none. */
#ifndef CREST_TALLIES
#define CREST_TALLIES 10
#endif

/* A conditions frame every so many seconds; 0: none, for as it stands the example knows none of the three below.
 * Each may be a number or a call of yours (declare it here), which is made between two tallies and has to be back
 * well within PERIOD_MS. */
#ifndef CONDITIONS_S
#define CONDITIONS_S 0
#endif
#ifndef TEMPERATURE_C100
#define TEMPERATURE_C100 BW_TEMPERATURE_UNKNOWN /* 0.01 degC, near the detectors */
#endif
#ifndef SUPPLY_MV
#define SUPPLY_MV 0
#endif
#ifndef FREQUENCY_HZ
#define FREQUENCY_HZ 0 /* of the transmitter */
#endif

#endif
