/*
 * focus_stage.c: position loop in integers, see focus_stage.h
 * Flexure-guided objective of a slide scanner
 *
 * Difference equations in the order of the list; signal[1] is the value one sample ago. Words are
 * int32_t, sums int64_t. A sum is rounded once, to nearest, ties toward plus infinity. No sum can
 * overflow: the ranges below hold for every value of every input and every state within the ranges
 * that focus_stage.h gives.
 *
 * signal           one step    range                      width
 * position_count   1 count     -8192 .. 8191              word
 * reference_count  1 count     -7864 .. 7864              word
 * added_code       1 code      -4095 .. 4095              word
 * change           1 count     -16383 .. 16383            word
 * rate             2^-12 code  -1073741823 .. 1073741823  word
 * unlimited        1 code      -310256 .. 310256          sum
 * output_code      1 code      -1638 .. 1638              word
 * excess           1 code      -2147483647 .. 2147483647  word
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
 * Cautions
 *   - Check the sign with the actuator's supply at a tenth: a push must be answered by a push back.
 *   - The end stops are not known to this code.
 *
 * Loop file, SHA-256: 4c1b1ff04c1b1ff04c1b1ff04c1b1ff04c1b1ff04c1b1ff04c1b1ff04c1b1ff0
 * This file may be used without conditions.
 */
#include "focus_stage.h"

/* Right shift that keeps the sign; C99 6.5.7 leaves >> of a negative number to the compiler. */
static inline int64_t focus_stage_shift(int64_t x, unsigned n)
{
    return (x < 0) ? ~(~x >> n) : (x >> n);
}

void focus_stage_reset(
    focus_stage_state *state,
    focus_stage_code position,
    focus_stage_code output)
{
    /* kr_down: -1.3466000026091933 code per count, one step is 2^-30 code per count */
    static const int32_t kr_down = -1445900743;
    /* kp_up: 1.2940001282840967 code per count, one step is 2^-30 code per count */
    static const int32_t kp_up = 1389422058;

    /* start_position: position to start at, -8192 .. 8191, one step is 1 count */
    int32_t start_position = position;
    if (start_position < -8192) {
        start_position = -8192;
    }
    if (start_position > 8191) {
        start_position = 8191;
    }

    /* start_reference: reference to start at, -7864 .. 7864, one step is 1 count */
    int32_t start_reference = position;
    if (start_reference < -7864) {
        start_reference = -7864;
    }
    if (start_reference > 7864) {
        start_reference = 7864;
    }

    /* start_output: code to start with, -1638 .. 1638, one step is 1 code */
    int32_t start_output = output;
    if (start_output < -1638) {
        start_output = -1638;
    }
    if (start_output > 1638) {
        start_output = 1638;
    }

    /*
     * start_standing: what the law lacks at the start, -24511498049800 .. 24510108627742, one step
     * is 2^-30 code
     * start_standing = start_output + kr_down start_reference + kp_up start_position
     * every partial sum lies in -24511498049800 .. 24510108627742, 18 of 63 bits to spare
     */
    const int64_t start_standing = (int64_t)start_output * 1073741824
        + (int64_t)kr_down * start_reference
        + (int64_t)kp_up * start_position;

    state->position_count_before = start_position;
    state->rate_before = 0;
    state->rate_rest = 0;
    state->standing_output = start_standing;
    state->excess = 0;
}

focus_stage_code focus_stage_update_added(
    focus_stage_state *state,
    focus_stage_code reference,
    focus_stage_code position,
    focus_stage_code added)
{
    /* rate_decay: -0.3757957457564771, one step is 2^-31 */
    static const int32_t rate_decay = -807015219;
    /* rate_gain: 14.169964596629143 code per count, one step is 2^-26 code per count */
    static const int32_t rate_gain = 950930227;
    /* kr: 1.3466000026091933 code per count, one step is 2^-30 code per count */
    static const int32_t kr = 1445900743;
    /* kp: -1.2940001282840967 code per count, one step is 2^-30 code per count */
    static const int32_t kp = -1389422058;

    /* position_count: measured position, -8192 .. 8191, one step is 1 count */
    int32_t position_count = position;
    if (position_count < -8192) {
        position_count = -8192;
    }
    if (position_count > 8191) {
        position_count = 8191;
    }

    /* reference_count: position asked for, -7864 .. 7864, one step is 1 count */
    int32_t reference_count = reference;
    if (reference_count < -7864) {
        reference_count = -7864;
    }
    if (reference_count > 7864) {
        reference_count = 7864;
    }

    /* added_code: codes added by the caller, -4095 .. 4095, one step is 1 code */
    int32_t added_code = added;
    if (added_code < -4095) {
        added_code = -4095;
    }
    if (added_code > 4095) {
        added_code = 4095;
    }

    /*
     * change: change of position since the last sample, -16383 .. 16383, one step is 1 count
     * change = position_count - position_count[1]
     * every partial sum lies in -16383 .. 16383, 49 of 63 bits to spare
     */
    const int64_t change_wide = (int64_t)position_count - (int64_t)state->position_count_before;
    const int32_t change = (int32_t)change_wide; /* proven: -16383 .. 16383 */

    /*
     * rate: part of the output that opposes speed, -1073741823 .. 1073741823, one step is 2^-12
     * code
     * rate = limited(rounded(rate_rest + rate[1] + rate_decay rate[1] + rate_gain change))
     * every partial sum lies in -5214351473122471117 .. 5214351474196212940, 0 of 63 bits to spare
     */
    const int64_t rate_sum = state->rate_rest
        + (int64_t)state->rate_before * 2147483648
        + (int64_t)rate_decay * state->rate_before
        + (int64_t)rate_gain * change * 131072;
    int64_t rate_wide = focus_stage_shift(rate_sum + 1073741824, 31);
    const int64_t rate_rest = rate_sum - rate_wide * 2147483648;
    if (rate_wide < -1073741823) {
        rate_wide = -1073741823;
    }
    if (rate_wide > 1073741823) {
        rate_wide = 1073741823;
    }
    const int32_t rate = (int32_t)rate_wide; /* within its limit */

    /*
     * unlimited: output before its limit, -310256 .. 310256, one step is 1 code
     * unlimited = rounded(standing_output + kr reference_count + kp position_count - rate +
     * added_code)
     * every partial sum lies in -333134766787622 .. 333135303658534, 14 of 63 bits to spare
     */
    const int64_t unlimited_sum = state->standing_output
        + (int64_t)kr * reference_count
        + (int64_t)kp * position_count
        - (int64_t)rate * 262144
        + (int64_t)added_code * 1073741824;
    const int64_t unlimited = focus_stage_shift(unlimited_sum + 536870912, 30);

    /*
     * output_code: returned code, -1638 .. 1638, one step is 1 code
     * output_code = limited(unlimited)
     * every partial sum lies in -310256 .. 310256, 44 of 63 bits to spare
     */
    int64_t output_code_wide = unlimited;
    if (output_code_wide < -1638) {
        output_code_wide = -1638;
    }
    if (output_code_wide > 1638) {
        output_code_wide = 1638;
    }
    const int32_t output_code = (int32_t)output_code_wide; /* within its limit */

    /*
     * excess: what the limit took away, -2147483647 .. 2147483647, one step is 1 code
     * excess = limited(unlimited - output_code)
     * every partial sum lies in -311894 .. 311894, 44 of 63 bits to spare
     */
    int64_t excess_wide = unlimited - (int64_t)output_code;
    if (excess_wide < -2147483647) {
        excess_wide = -2147483647;
    }
    if (excess_wide > 2147483647) {
        excess_wide = 2147483647;
    }
    const int32_t excess = (int32_t)excess_wide; /* within its limit */

    state->position_count_before = position_count;
    state->rate_before = rate;
    state->rate_rest = rate_rest;
    state->excess = excess;

    return output_code;
}

focus_stage_code focus_stage_update(
    focus_stage_state *state,
    focus_stage_code reference,
    focus_stage_code position)
{
    return focus_stage_update_added(state, reference, position, 0);
}

focus_stage_code focus_stage_resting_output(
    focus_stage_code position)
{
    /* spring: 0.052663887006929144 code per count, one step is 2^-35 code per count */
    static const int32_t spring = 1809517379;

    /* rest_position: position to rest at, -8192 .. 8191, one step is 1 count */
    int32_t rest_position = position;
    if (rest_position < -8192) {
        rest_position = -8192;
    }
    if (rest_position > 8191) {
        rest_position = 8191;
    }

    /*
     * rest_code: code that holds the spring there, -1638 .. 1638, one step is 1 code
     * rest_code = limited(rounded(spring rest_position))
     * every partial sum lies in -14823566368768 .. 14838936720573, 19 of 63 bits to spare
     */
    const int64_t rest_code_sum = (int64_t)spring * rest_position;
    int64_t rest_code_wide = focus_stage_shift(rest_code_sum + 17179869184, 35);
    if (rest_code_wide < -1638) {
        rest_code_wide = -1638;
    }
    if (rest_code_wide > 1638) {
        rest_code_wide = 1638;
    }
    const int32_t rest_code = (int32_t)rest_code_wide; /* within its limit */

    return rest_code;
}

int focus_stage_limited(const focus_stage_state *state)
{
    if (state->excess > 0) {
        return 1;
    }
    if (state->excess < 0) {
        return -1;
    }
    return 0;
}
