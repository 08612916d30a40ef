/*
 * tilt_mirror.h: position loop in integers, one call a sample
 * Mirror on a torsion hinge, with a notch on its second mode
 *
 * Written although it does not keep what was asked of it:
 *   - overshoot = 7.2 %, limit 5 %: missed
 *   - load: not judged, no cycle count
 *
 * Sample rate 8 kHz; the new code acts 40 us after the sampling instant.
 * Position and reference: 12 urad per count. Code: 0.4 mA per code.
 * Law: pid with one notch
 *
 * Every value of the type is allowed. What lies outside acts as if clipped to
 *   - reference: -2048 .. 2047 count
 *   - position: -2048 .. 2047 count
 *   - added: -2047 .. 2047 code
 *
 * Order of calls
 *   - Measure the position. Call tilt_mirror_reset with it and with the code that is being put out,
 *     or, from a standstill, with what tilt_mirror_resting_output gives for it.
 *   - Then, every sample: measure, call tilt_mirror_update, put the returned code out at once.
 *   - Begin with the reference at the measured position and move it from there in a ramp.
 *   - After any pause in the calls begin again with tilt_mirror_reset.
 *
 * Cautions
 *   - Keep the beam enclosed until the loop has been seen to hold.
 *
 * Asked for beside it: --set aim.law=pid, --despite-misses
 * This file may be used without conditions.
 */
#ifndef TILT_MIRROR_H
#define TILT_MIRROR_H

#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

/* A sensor count or an actuator code. */
typedef int16_t tilt_mirror_code;

/* Belongs to the caller, one for each axis. Only the functions below write it. */
typedef struct tilt_mirror_state {
    /* measured position, 1 sample ago; -2048 .. 2047, one step is 1 count */
    int16_t position_count_before;
    /*
     * part of the output that opposes speed, 1 sample ago; -32767 .. 32767, one step is 2^-3 code
     */
    int16_t rate_before;
    /* what the last rounding of rate left over; -1024 .. 1023, one step is 2^-14 code */
    int32_t rate_rest;
    /* integral part of the output, 1 sample ago; -180000000 .. 180000000, one step is 2^-16 code */
    int32_t integral_before;
    /* output before the notch, 1 sample ago; -32767 .. 32767, one step is 2^-3 code */
    int16_t wanted_before;
    /* output before the notch, 2 samples ago; -32767 .. 32767, one step is 2^-3 code */
    int16_t wanted_before2;
    /* output behind the notch, 1 sample ago; -32767 .. 32767, one step is 2^-3 code */
    int16_t notched_before;
    /* output behind the notch, 2 samples ago; -32767 .. 32767, one step is 2^-3 code */
    int16_t notched_before2;
    /* what the last rounding of notched left over; -4096 .. 4095, one step is 2^-16 code */
    int32_t notched_rest;
    /* what the limit took away; -2000 .. 2000, one step is 1 code */
    int16_t excess;
} tilt_mirror_state;

/*
 * Puts the controller at rest: every later update with reference and position at this position
 * returns output, within the limit, for as long as both stay there. What the law lacks for that
 * (gravity, a preload) is kept in the state.
 */
void tilt_mirror_reset(
    tilt_mirror_state *state,
    tilt_mirror_code position,
    tilt_mirror_code output);

/* One sample: the code to put out now, within the limit. */
tilt_mirror_code tilt_mirror_update(
    tilt_mirror_state *state,
    tilt_mirror_code reference,
    tilt_mirror_code position);

/*
 * The same with codes of the caller's own, added before the limit; with 0 it is tilt_mirror_update,
 * word for word.
 */
tilt_mirror_code tilt_mirror_update_added(
    tilt_mirror_state *state,
    tilt_mirror_code reference,
    tilt_mirror_code position,
    tilt_mirror_code added);

/* The code that holds the plant of the loop file at rest at a position. */
tilt_mirror_code tilt_mirror_resting_output(
    tilt_mirror_code position);

/* The last update's code was 1: cut down to the limit, -1: cut up to it, 0: neither. */
int tilt_mirror_limited(const tilt_mirror_state *state);

#ifdef __cplusplus
}
#endif

#endif
