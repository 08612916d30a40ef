/*
 * gauge_table.h: position loop in integers, one call a sample
 * Table under a gauge, 0.5 µm a count; counts and codes from zeros of their own
 *
 * Sample rate 2 kHz; the new code acts 600 us after the sampling instant.
 * Position and reference: 0.5 um per count. Code: 2 mA per code.
 * Law: pd
 *
 * Every value of the type is allowed. What lies outside acts as if clipped to
 *   - reference: 140 .. 3940 count
 *   - position: 0 .. 4095 count
 *   - added: -1023 .. 1023 code
 *
 * Order of calls
 *   - Measure the position. Call gauge_table_reset with it and with the code that is being put out,
 *     or, from a standstill, with what gauge_table_resting_output gives for it.
 *   - Then, every sample: measure, call gauge_table_update, put the returned code out at once.
 *   - Begin with the reference at the measured position and move it from there in a ramp.
 *   - After any pause in the calls begin again with gauge_table_reset.

 *
 * Loop file, SHA-256: a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5
 * This file may be used without conditions.
 */
#ifndef GAUGE_TABLE_H
#define GAUGE_TABLE_H

#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

/* A sensor count or an actuator code. */
typedef int16_t gauge_table_code;

/* Belongs to the caller, one for each axis. Only the functions below write it. */
typedef struct gauge_table_state {
    /* position from zero, 1 sample ago; -2055 .. 2040, one step is 1 count */
    int16_t position_count_before;
    /*
     * part of the output that opposes speed, 1 sample ago; -32767 .. 32767, one step is 2^-3 code
     */
    int16_t rate_before;
    /* what the last rounding of rate left over; -8192 .. 8191, one step is 2^-17 code */
    int32_t rate_rest;
    /*
     * constant term of unlimited, written by reset only; -118955480 .. 118611440, one step is 2^-16
     * code
     */
    int32_t standing_output;
    /* what the limit took away from the returned code; -8744 .. 8744, one step is 1 code */
    int16_t excess;
} gauge_table_state;

/*
 * Puts the controller at rest: every later update with reference and position at this position
 * returns output, within the limit, for as long as both stay there. What the law lacks for that
 * (gravity, a preload) is kept in the state.
 */
void gauge_table_reset(
    gauge_table_state *state,
    gauge_table_code position,
    gauge_table_code output);

/* One sample: the code to put out now, within the limit. */
gauge_table_code gauge_table_update(
    gauge_table_state *state,
    gauge_table_code reference,
    gauge_table_code position);

/*
 * The same with codes of the caller's own, added before the limit; with 0 it is gauge_table_update,
 * word for word.
 */
gauge_table_code gauge_table_update_added(
    gauge_table_state *state,
    gauge_table_code reference,
    gauge_table_code position,
    gauge_table_code added);

/* The code that holds the plant of the loop file at rest at a position. */
gauge_table_code gauge_table_resting_output(
    gauge_table_code position);

/* The last update's code was 1: cut down to the limit, -1: cut up to it, 0: neither. */
int gauge_table_limited(const gauge_table_state *state);

#ifdef __cplusplus
}
#endif

#endif
