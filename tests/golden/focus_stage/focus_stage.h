/*
 * focus_stage.h: position loop in integers, one call a sample
 * Flexure-guided objective of a slide scanner
 *
 * Sample rate 20 kHz; the new code acts 18 us after the sampling instant.
 * Position and reference: 152.6 nm per count. Code: 0.7324 mA per code.
 * Law: pd, Kp = 59 N/mm, Kd = 86 N*s/m, reference weighted to a static gain of 1
 *
 * Every value of the type is allowed. What lies outside acts as if clipped to
 *   - reference: -7864 .. 7864 count
 *   - position: -8192 .. 8191 count
 *   - added: -4095 .. 4095 code
 *
 * Order of calls
 *   - Measure the position. Call focus_stage_reset with it and with the code that is being put out,
 *     or, from a standstill, with what focus_stage_resting_output gives for it.
 *   - Then, every sample: measure, call focus_stage_update, put the returned code out at once.
 *   - Begin with the reference at the measured position and move it from there in a ramp.
 *   - After any pause in the calls begin again with focus_stage_reset.
 *
 * Cautions
 *   - Check the sign with the actuator's supply at a tenth: a push must be answered by a push back.
 *   - The end stops are not known to this code.
 *
 * Loop file, SHA-256: 4c1b1ff04c1b1ff04c1b1ff04c1b1ff04c1b1ff04c1b1ff04c1b1ff04c1b1ff0
 * This file may be used without conditions.
 */
#ifndef FOCUS_STAGE_H
#define FOCUS_STAGE_H

#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

/* A sensor count or an actuator code. */
typedef int32_t focus_stage_code;

/* Belongs to the caller, one for each axis. Only the functions below write it. */
typedef struct focus_stage_state {
    /* measured position, 1 sample ago; -8192 .. 8191, one step is 1 count */
    int32_t position_count_before;
    /*
     * part of the output that opposes speed, 1 sample ago; -1073741823 .. 1073741823, one step is
     * 2^-12 code
     */
    int32_t rate_before;
    /*
     * what the last rounding of rate left over; -1073741824 .. 1073741823, one step is 2^-43 code
     */
    int64_t rate_rest;
    /*
     * constant term of unlimited, written by reset only; -24511498049800 .. 24510108627742, one
     * step is 2^-30 code
     */
    int64_t standing_output;
    /* what the limit took away; -2147483647 .. 2147483647, one step is 1 code */
    int32_t excess;
} focus_stage_state;

/*
 * Puts the controller at rest: every later update with reference and position at this position
 * returns output, within the limit, for as long as both stay there. What the law lacks for that
 * (gravity, a preload) is kept in the state.
 */
void focus_stage_reset(
    focus_stage_state *state,
    focus_stage_code position,
    focus_stage_code output);

/* One sample: the code to put out now, within the limit. */
focus_stage_code focus_stage_update(
    focus_stage_state *state,
    focus_stage_code reference,
    focus_stage_code position);

/*
 * The same with codes of the caller's own, added before the limit; with 0 it is focus_stage_update,
 * word for word.
 */
focus_stage_code focus_stage_update_added(
    focus_stage_state *state,
    focus_stage_code reference,
    focus_stage_code position,
    focus_stage_code added);

/* The code that holds the plant of the loop file at rest at a position. */
focus_stage_code focus_stage_resting_output(
    focus_stage_code position);

/* The last update's code was 1: cut down to the limit, -1: cut up to it, 0: neither. */
int focus_stage_limited(const focus_stage_state *state);

#ifdef __cplusplus
}
#endif

#endif
