/*
 * gauge_table.c: position loop in integers, see gauge_table.h
 * Table under a gauge, 0.5 µm a count; counts and codes from zeros of their own
 *
 * Difference equations in the order of the list; signal[1] is the value one sample ago. Words are
 * int16_t, sums int32_t. A sum is rounded once, to nearest, ties toward plus infinity. No sum can
 * overflow: the ranges below hold for every value of every input and every state within the ranges
 * that gauge_table.h gives.
 *
 * signal           one step   range            width
 * position_count   1 count    -2055 .. 2040    word
 * reference_count  1 count    -1900 .. 1900    word
 * added_code       1 code     -1023 .. 1023    word
 * change           1 count    -4095 .. 4095    word
 * rate             2^-3 code  -32767 .. 32767  word
 * unlimited        1 code     -8344 .. 8344    sum
 * limited_code     1 code     -400 .. 400      word
 * output_code      1 code     112 .. 912       word
 * excess           1 code     -8744 .. 8744    word
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
 * Loop file, SHA-256: a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5a5
 * This file may be used without conditions.
 */
#include "gauge_table.h"

/* Right shift that keeps the sign; C99 6.5.7 leaves >> of a negative number to the compiler. */
static inline int32_t gauge_table_shift(int32_t x, unsigned n)
{
    return (x < 0) ? ~(~x >> n) : (x >> n);
}

void gauge_table_reset(
    gauge_table_state *state,
    gauge_table_code position,
    gauge_table_code output)
{
    /* kr_down: -0.36627197265625 code per count, one step is 2^-14 code per count */
    static const int16_t kr_down = -6001;
    /* kp_up: 0.3499755859375 code per count, one step is 2^-14 code per count */
    static const int16_t kp_up = 5734;

    /*
     * start_position: position to start at, -2055 .. 2040, one step is 1 count
     * start_position = limited(2040 - position)
     * every partial sum lies in -32767 .. 34808, 15 of 31 bits to spare
     */
    int32_t start_position_wide = 2040 - (int32_t)position;
    if (start_position_wide < -2055) {
        start_position_wide = -2055;
    }
    if (start_position_wide > 2040) {
        start_position_wide = 2040;
    }
    const int16_t start_position = (int16_t)start_position_wide; /* within its limit */

    /*
     * start_reference: reference to start at, -1900 .. 1900, one step is 1 count
     * start_reference = limited(2040 - position)
     * every partial sum lies in -32767 .. 34808, 15 of 31 bits to spare
     */
    int32_t start_reference_wide = 2040 - (int32_t)position;
    if (start_reference_wide < -1900) {
        start_reference_wide = -1900;
    }
    if (start_reference_wide > 1900) {
        start_reference_wide = 1900;
    }
    const int16_t start_reference = (int16_t)start_reference_wide; /* within its limit */

    /*
     * start_code: code to start with, from zero, -400 .. 400, one step is 1 code
     * start_code = limited(512 - output)
     * every partial sum lies in -32767 .. 33280, 15 of 31 bits to spare
     */
    int32_t start_code_wide = 512 - (int32_t)output;
    if (start_code_wide < -400) {
        start_code_wide = -400;
    }
    if (start_code_wide > 400) {
        start_code_wide = 400;
    }
    const int16_t start_code = (int16_t)start_code_wide; /* within its limit */

    /*
     * start_standing: what the law lacks at the start, -118955480 .. 118611440, one step is 2^-16
     * code
     * start_standing = start_code + kr_down start_reference + kp_up start_position
     * every partial sum lies in -118955480 .. 118611440, 4 of 31 bits to spare
     */
    const int32_t start_standing = (int32_t)start_code * 65536
        + (int32_t)kr_down * start_reference * 4
        + (int32_t)kp_up * start_position * 4;

    state->position_count_before = start_position;
    state->rate_before = 0;
    state->rate_rest = 0;
    state->standing_output = start_standing;
    state->excess = 0;
}

gauge_table_code gauge_table_update_added(
    gauge_table_state *state,
    gauge_table_code reference,
    gauge_table_code position,
    gauge_table_code added)
{
    /* rate_pole: 0.625, one step is 2^-14 */
    static const int16_t rate_pole = 10240;
    /* rate_gain: 2.8077392578125 code per count, one step is 2^-13 code per count */
    static const int16_t rate_gain = 23001;
    /* kr: 0.36627197265625 code per count, one step is 2^-14 code per count */
    static const int16_t kr = 6001;
    /* kp: -0.3499755859375 code per count, one step is 2^-14 code per count */
    static const int16_t kp = -5734;

    /*
     * position_count: position from zero, -2055 .. 2040, one step is 1 count
     * position_count = limited(2040 - position)
     * every partial sum lies in -32767 .. 34808, 15 of 31 bits to spare
     */
    int32_t position_count_wide = 2040 - (int32_t)position;
    if (position_count_wide < -2055) {
        position_count_wide = -2055;
    }
    if (position_count_wide > 2040) {
        position_count_wide = 2040;
    }
    const int16_t position_count = (int16_t)position_count_wide; /* within its limit */

    /*
     * reference_count: reference from zero, -1900 .. 1900, one step is 1 count
     * reference_count = limited(2040 - reference)
     * every partial sum lies in -32767 .. 34808, 15 of 31 bits to spare
     */
    int32_t reference_count_wide = 2040 - (int32_t)reference;
    if (reference_count_wide < -1900) {
        reference_count_wide = -1900;
    }
    if (reference_count_wide > 1900) {
        reference_count_wide = 1900;
    }
    const int16_t reference_count = (int16_t)reference_count_wide; /* within its limit */

    /*
     * added_code: added codes, forward sense, -1023 .. 1023, one step is 1 code
     * added_code = limited(-added)
     * every partial sum lies in -32767 .. 32768, 15 of 31 bits to spare
     */
    int32_t added_code_wide = -(int32_t)added;
    if (added_code_wide < -1023) {
        added_code_wide = -1023;
    }
    if (added_code_wide > 1023) {
        added_code_wide = 1023;
    }
    const int16_t added_code = (int16_t)added_code_wide; /* within its limit */

    /*
     * change: change of position since the last sample, -4095 .. 4095, one step is 1 count
     * change = position_count - position_count[1]
     * every partial sum lies in -4095 .. 4095, 19 of 31 bits to spare
     */
    const int32_t change_wide = (int32_t)position_count - (int32_t)state->position_count_before;
    const int16_t change = (int16_t)change_wide; /* proven: -4095 .. 4095 */

    /*
     * rate: part of the output that opposes speed, -32767 .. 32767, one step is 2^-3 code
     * rate = limited(rounded(rate_rest + rate_pole rate[1] + rate_gain change))
     * every partial sum lies in -1842567792 .. 1842575983, 0 of 31 bits to spare
     */
    const int32_t rate_sum = state->rate_rest
        + (int32_t)rate_pole * state->rate_before
        + (int32_t)rate_gain * change * 16;
    int32_t rate_wide = gauge_table_shift(rate_sum + 8192, 14);
    const int32_t rate_rest = rate_sum - rate_wide * 16384;
    if (rate_wide < -32767) {
        rate_wide = -32767;
    }
    if (rate_wide > 32767) {
        rate_wide = 32767;
    }
    const int16_t rate = (int16_t)rate_wide; /* within its limit */

    /*
     * unlimited: output before its limit, from zero, -8344 .. 8344, one step is 1 code
     * unlimited = rounded(standing_output + kr reference_count + kp position_count - rate +
     * added_code)
     * every partial sum lies in -546823112 .. 546855880, 1 of 31 bits to spare
     */
    const int32_t unlimited_sum = state->standing_output
        + (int32_t)kr * reference_count * 4
        + (int32_t)kp * position_count * 4
        - (int32_t)rate * 8192
        + (int32_t)added_code * 65536;
    const int32_t unlimited = gauge_table_shift(unlimited_sum + 32768, 16);

    /*
     * limited_code: output within its limit, from zero, -400 .. 400, one step is 1 code
     * limited_code = limited(unlimited)
     * every partial sum lies in -8344 .. 8344, 17 of 31 bits to spare
     */
    int32_t limited_code_wide = unlimited;
    if (limited_code_wide < -400) {
        limited_code_wide = -400;
    }
    if (limited_code_wide > 400) {
        limited_code_wide = 400;
    }
    const int16_t limited_code = (int16_t)limited_code_wide; /* within its limit */

    /*
     * output_code: returned code, 112 .. 912, one step is 1 code
     * output_code = 512 - limited_code
     * every partial sum lies in -400 .. 912, 21 of 31 bits to spare
     */
    const int32_t output_code_wide = 512 - (int32_t)limited_code;
    const int16_t output_code = (int16_t)output_code_wide; /* proven: 112 .. 912 */

    /*
     * excess: what the limit took away from the returned code, -8744 .. 8744, one step is 1 code
     * excess = limited_code - unlimited
     * every partial sum lies in -8744 .. 8744, 17 of 31 bits to spare
     */
    const int32_t excess_wide = (int32_t)limited_code - unlimited;
    const int16_t excess = (int16_t)excess_wide; /* proven: -8744 .. 8744 */

    state->position_count_before = position_count;
    state->rate_before = rate;
    state->rate_rest = rate_rest;
    state->excess = excess;

    return output_code;
}

gauge_table_code gauge_table_update(
    gauge_table_state *state,
    gauge_table_code reference,
    gauge_table_code position)
{
    return gauge_table_update_added(state, reference, position, 0);
}

gauge_table_code gauge_table_resting_output(
    gauge_table_code position)
{
    /* spring: 0.01667022705078125 code per count, one step is 2^-18 code per count */
    static const int16_t spring = 4370;

    /*
     * rest_position: position to rest at, -2055 .. 2040, one step is 1 count
     * rest_position = limited(2040 - position)
     * every partial sum lies in -32767 .. 34808, 15 of 31 bits to spare
     */
    int32_t rest_position_wide = 2040 - (int32_t)position;
    if (rest_position_wide < -2055) {
        rest_position_wide = -2055;
    }
    if (rest_position_wide > 2040) {
        rest_position_wide = 2040;
    }
    const int16_t rest_position = (int16_t)rest_position_wide; /* within its limit */

    /*
     * rest_limited: output that holds the spring there, -400 .. 400, one step is 1 code
     * rest_limited = limited(rounded(spring rest_position))
     * every partial sum lies in -8980350 .. 9045872, 7 of 31 bits to spare
     */
    const int32_t rest_limited_sum = (int32_t)spring * rest_position;
    int32_t rest_limited_wide = gauge_table_shift(rest_limited_sum + 131072, 18);
    if (rest_limited_wide < -400) {
        rest_limited_wide = -400;
    }
    if (rest_limited_wide > 400) {
        rest_limited_wide = 400;
    }
    const int16_t rest_limited = (int16_t)rest_limited_wide; /* within its limit */

    /*
     * rest_code: the same as a returned code, 112 .. 912, one step is 1 code
     * rest_code = 512 - rest_limited
     * every partial sum lies in -400 .. 912, 21 of 31 bits to spare
     */
    const int32_t rest_code_wide = 512 - (int32_t)rest_limited;
    const int16_t rest_code = (int16_t)rest_code_wide; /* proven: 112 .. 912 */

    return rest_code;
}

int gauge_table_limited(const gauge_table_state *state)
{
    if (state->excess > 0) {
        return 1;
    }
    if (state->excess < 0) {
        return -1;
    }
    return 0;
}
