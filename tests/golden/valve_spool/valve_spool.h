/*
 * valve_spool.h: position loop in integers, one call a sample
 * Spool of a proportional valve; counts and codes run backward
 *
 * Sample rate 5 kHz; the new code acts 100 us after the sampling instant.
 * Position and reference: 0.5 um per count. Code: 2 mA per code.
 * Law: lead on a spring
 *
 * Every value of the type is allowed. What lies outside acts as if clipped to
 *   - reference: 140 .. 3940 count
 *   - position: 0 .. 4095 count
 *   - added: -1023 .. 1023 code
 *
 * Order of calls
 *   - Measure the position. Call valve_spool_reset with it and with the code that is being put out,
 *     or, from a standstill, with what valve_spool_resting_output gives for it.
 *   - Then, every sample: measure, call valve_spool_update, put the returned code out at once.
 *   - Begin with the reference at the measured position and move it from there in a ramp.
 *   - After any pause in the calls begin again with valve_spool_reset.

 *
 * Loop file, SHA-256: 0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f
 * This file may be used without conditions.
 */
#ifndef VALVE_SPOOL_H
#define VALVE_SPOOL_H

#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

/* A sensor count or an actuator code. */
typedef int32_t valve_spool_code;

/* Belongs to the caller, one for each axis. Only the functions below write it. */
typedef struct valve_spool_state {
    /*
     * position less reference: forward, since the counts run backward, 1 sample ago; -3940 .. 3955,
     * one step is 1 count
     */
    int32_t error_before;
    /*
     * filtered change of the error, 1 sample ago; -100000000 .. 100000000, one step is 2^-16 count
     */
    int32_t lead_before;
    /*
     * constant term of unlimited, written by reset only; -1679174157143040 .. 1683709642606080, one
     * step is 2^-40 code
     */
    int64_t standing_output;
    /* what the limit took away; -2147483648 .. 2147483647, one step is 1 code */
    int32_t excess;
} valve_spool_state;

/*
 * Puts the controller at rest: every later update with reference and position at this position
 * returns output, within the limit, for as long as both stay there. What the law lacks for that
 * (gravity, a preload) is kept in the state.
 */
void valve_spool_reset(
    valve_spool_state *state,
    valve_spool_code position,
    valve_spool_code output);

/* One sample: the code to put out now, within the limit. */
valve_spool_code valve_spool_update(
    valve_spool_state *state,
    valve_spool_code reference,
    valve_spool_code position);

/*
 * The same with codes of the caller's own, added before the limit; with 0 it is valve_spool_update,
 * word for word.
 */
valve_spool_code valve_spool_update_added(
    valve_spool_state *state,
    valve_spool_code reference,
    valve_spool_code position,
    valve_spool_code added);

/* The code that holds the plant of the loop file at rest at a position. */
valve_spool_code valve_spool_resting_output(
    valve_spool_code position);

/* The last update's code was 1: cut down to the limit, -1: cut up to it, 0: neither. */
int valve_spool_limited(const valve_spool_state *state);

#ifdef __cplusplus
}
#endif

#endif
