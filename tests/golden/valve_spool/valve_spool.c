/*
 * valve_spool.c: position loop in integers, see valve_spool.h
 * Spool of a proportional valve; counts and codes run backward
 *
 * Difference equations in the order of the list; signal[1] is the value one sample ago. Words are
 * int32_t, sums int64_t. A sum is rounded once, to nearest, ties toward plus infinity. No sum can
 * overflow: the ranges below hold for every value of every input and every state within the ranges
 * that valve_spool.h gives.
 *
 * signal           one step     range                      width
 * position_count   1 count      0 .. 4095                  word
 * reference_count  1 count      140 .. 3940                word
 * added_code       1 code       -1023 .. 1023              word
 * error            1 count      -3940 .. 3955              word
 * lead             2^-16 count  -100000000 .. 100000000    word
 * unlimited        1 code       -159420 .. 160444          sum
 * output_code      1 code       112 .. 912                 word
 * excess           1 code       -2147483648 .. 2147483647  word
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
 * Loop file, SHA-256: 0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f0f
 * This file may be used without conditions.
 */
#include "valve_spool.h"

/* Right shift that keeps the sign; C99 6.5.7 leaves >> of a negative number to the compiler. */
static inline int64_t valve_spool_shift(int64_t x, unsigned n)
{
    return (x < 0) ? ~(~x >> n) : (x >> n);
}

void valve_spool_reset(
    valve_spool_state *state,
    valve_spool_code position,
    valve_spool_code output)
{
    /* k_spring_down: -0.02299999981187284 code per count, one step is 2^-32 code per count */
    static const int32_t k_spring_down = -98784247;
    /* k_error_up: 0.27499999990686774 code per count, one step is 2^-32 code per count */
    static const int32_t k_error_up = 1181116006;

    /* start_position: position to start at, 0 .. 4095, one step is 1 count */
    int32_t start_position = position;
    if (start_position < 0) {
        start_position = 0;
    }
    if (start_position > 4095) {
        start_position = 4095;
    }

    /* start_reference: reference to start at, 140 .. 3940, one step is 1 count */
    int32_t start_reference = position;
    if (start_reference < 140) {
        start_reference = 140;
    }
    if (start_reference > 3940) {
        start_reference = 3940;
    }

    /* start_output: code to start with, 112 .. 912, one step is 1 code */
    int32_t start_output = output;
    if (start_output < 112) {
        start_output = 112;
    }
    if (start_output > 912) {
        start_output = 912;
    }

    /*
     * start_error: error that a reference beyond the travel leaves, -3940 .. 3955, one step is 1
     * count
     * start_error = start_position - start_reference
     * every partial sum lies in -3940 .. 4095, 51 of 63 bits to spare
     */
    const int64_t start_error_wide = (int64_t)start_position - (int64_t)start_reference;
    const int32_t start_error = (int32_t)start_error_wide; /* proven: -3940 .. 3955 */

    /*
     * start_standing: what the law lacks at the start, -1679174157143040 .. 1683709642606080, one
     * step is 2^-40 code
     * start_standing = -465.0800003837794 + start_output + k_spring_down start_reference +
     * k_error_up start_error
     * every partial sum lies in -1679174157143040 .. 1683709642606080, 12 of 63 bits to spare
     */
    const int64_t start_standing = -511360868268032
        + (int64_t)start_output * 1099511627776
        + (int64_t)k_spring_down * start_reference * 256
        + (int64_t)k_error_up * start_error * 256;

    state->error_before = start_error;
    state->lead_before = 0;
    state->standing_output = start_standing;
    state->excess = 0;
}

valve_spool_code valve_spool_update_added(
    valve_spool_state *state,
    valve_spool_code reference,
    valve_spool_code position,
    valve_spool_code added)
{
    /* lead_pole: 0.5839999997988343, one step is 2^-31 */
    static const int32_t lead_pole = 1254130450;
    /* lead_gain: 0.4159999997355044, one step is 2^-31 */
    static const int32_t lead_gain = 893353197;
    /* lead_gain_before: -0.4159999997355044, one step is 2^-31 */
    static const int32_t lead_gain_before = -893353197;
    /* k_error: -0.27499999990686774 code per count, one step is 2^-32 code per count */
    static const int32_t k_error = -1181116006;
    /* k_lead: -102.39999997615814 code per count, one step is 2^-24 code per count */
    static const int32_t k_lead = -1717986918;
    /* k_spring: 0.02299999981187284 code per count, one step is 2^-32 code per count */
    static const int32_t k_spring = 98784247;

    /* position_count: measured position, 0 .. 4095, one step is 1 count */
    int32_t position_count = position;
    if (position_count < 0) {
        position_count = 0;
    }
    if (position_count > 4095) {
        position_count = 4095;
    }

    /* reference_count: position asked for, 140 .. 3940, one step is 1 count */
    int32_t reference_count = reference;
    if (reference_count < 140) {
        reference_count = 140;
    }
    if (reference_count > 3940) {
        reference_count = 3940;
    }

    /* added_code: codes added by the caller, -1023 .. 1023, one step is 1 code */
    int32_t added_code = added;
    if (added_code < -1023) {
        added_code = -1023;
    }
    if (added_code > 1023) {
        added_code = 1023;
    }

    /*
     * error: position less reference: forward, since the counts run backward, -3940 .. 3955, one
     * step is 1 count
     * error = position_count - reference_count
     * every partial sum lies in -3940 .. 4095, 51 of 63 bits to spare
     */
    const int64_t error_wide = (int64_t)position_count - (int64_t)reference_count;
    const int32_t error = (int32_t)error_wide; /* proven: -3940 .. 3955 */

    /*
     * lead: filtered change of the error, -100000000 .. 100000000, one step is 2^-16 count
     * lead = limited(rounded(lead_pole lead[1] + lead_gain error + lead_gain_before error[1]))
     * every partial sum lies in -587639992461283840 .. 587639993535025664, 3 of 63 bits to spare
     */
    const int64_t lead_sum = (int64_t)lead_pole * state->lead_before
        + (int64_t)lead_gain * error * 65536
        + (int64_t)lead_gain_before * state->error_before * 65536;
    int64_t lead_wide = valve_spool_shift(lead_sum + 1073741824, 31);
    if (lead_wide < -100000000) {
        lead_wide = -100000000;
    }
    if (lead_wide > 100000000) {
        lead_wide = 100000000;
    }
    const int32_t lead = (int32_t)lead_wide; /* within its limit */

    /*
     * unlimited: returned code before its limit, -159420 .. 160444, one step is 1 code
     * unlimited = rounded(465.0800003837794 + standing_output + k_error error + k_lead lead +
     * k_spring reference_count + added_code)
     * every partial sum lies in -175283621390432256 .. 176410071053088768, 5 of 63 bits to spare
     */
    const int64_t unlimited_sum = 511360868268032
        + state->standing_output
        + (int64_t)k_error * error * 256
        + (int64_t)k_lead * lead
        + (int64_t)k_spring * reference_count * 256
        + (int64_t)added_code * 1099511627776;
    const int64_t unlimited = valve_spool_shift(unlimited_sum + 549755813888, 40);

    /*
     * output_code: returned code, 112 .. 912, one step is 1 code
     * output_code = limited(unlimited)
     * every partial sum lies in -159420 .. 160444, 45 of 63 bits to spare
     */
    int64_t output_code_wide = unlimited;
    if (output_code_wide < 112) {
        output_code_wide = 112;
    }
    if (output_code_wide > 912) {
        output_code_wide = 912;
    }
    const int32_t output_code = (int32_t)output_code_wide; /* within its limit */

    /*
     * excess: what the limit took away, -2147483648 .. 2147483647, one step is 1 code
     * excess = limited(unlimited - output_code)
     * every partial sum lies in -160332 .. 160444, 45 of 63 bits to spare
     */
    int64_t excess_wide = unlimited - (int64_t)output_code;
    if (excess_wide < -2147483648) {
        excess_wide = -2147483648;
    }
    if (excess_wide > 2147483647) {
        excess_wide = 2147483647;
    }
    const int32_t excess = (int32_t)excess_wide; /* within its limit */

    state->error_before = error;
    state->lead_before = lead;
    state->excess = excess;

    return output_code;
}

valve_spool_code valve_spool_update(
    valve_spool_state *state,
    valve_spool_code reference,
    valve_spool_code position)
{
    return valve_spool_update_added(state, reference, position, 0);
}

valve_spool_code valve_spool_resting_output(
    valve_spool_code position)
{
    /* k_spring: 0.02299999981187284 code per count, one step is 2^-32 code per count */
    static const int32_t k_spring = 98784247;

    /* rest_position: position to rest at, 0 .. 4095, one step is 1 count */
    int32_t rest_position = position;
    if (rest_position < 0) {
        rest_position = 0;
    }
    if (rest_position > 4095) {
        rest_position = 4095;
    }

    /*
     * rest_code: code that holds the spring there, 112 .. 912, one step is 1 code
     * rest_code = limited(rounded(465.0800003837794 + k_spring rest_position))
     * every partial sum lies in 0 .. 615468125896960, 13 of 63 bits to spare
     */
    const int64_t rest_code_sum = 511360868268032 + (int64_t)k_spring * rest_position * 256;
    int64_t rest_code_wide = valve_spool_shift(rest_code_sum + 549755813888, 40);
    if (rest_code_wide < 112) {
        rest_code_wide = 112;
    }
    if (rest_code_wide > 912) {
        rest_code_wide = 912;
    }
    const int32_t rest_code = (int32_t)rest_code_wide; /* within its limit */

    return rest_code;
}

int valve_spool_limited(const valve_spool_state *state)
{
    if (state->excess > 0) {
        return 1;
    }
    if (state->excess < 0) {
        return -1;
    }
    return 0;
}
