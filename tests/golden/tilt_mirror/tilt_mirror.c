/*
 * tilt_mirror.c: position loop in integers, see tilt_mirror.h
 * Mirror on a torsion hinge, with a notch on its second mode
 *
 * Written although it does not keep what was asked of it:
 *   - overshoot = 7.2 %, limit 5 %: missed
 *   - load: not judged, no cycle count
 *
 * Difference equations in the order of the list; signal[1] is the value one sample ago. Words are
 * int16_t, sums int32_t. A sum is rounded once, to nearest, ties toward plus infinity. No sum can
 * overflow: the ranges below hold for every value of every input and every state within the ranges
 * that tilt_mirror.h gives.
 *
 * signal           one step    range                    width
 * position_count   1 count     -2048 .. 2047            word
 * reference_count  1 count     -2048 .. 2047            word
 * added_code       1 code      -2047 .. 2047            word
 * change           1 count     -4095 .. 4095            word
 * rate             2^-3 code   -32767 .. 32767          word
 * error            1 count     -4095 .. 4095            word
 * integral         2^-16 code  -180000000 .. 180000000  sum
 * wanted           2^-3 code   -32767 .. 32767          word
 * notched          2^-3 code   -32767 .. 32767          word
 * unlimited        1 code      -4096 .. 4096            word
 * output_code      1 code      -1800 .. 1800            word
 * excess           1 code      -2000 .. 2000            word
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
 * Cautions
 *   - Keep the beam enclosed until the loop has been seen to hold.
 *
 * Asked for beside it: --set aim.law=pid, --despite-misses
 * This file may be used without conditions.
 */
#include "tilt_mirror.h"

/* Right shift that keeps the sign; C99 6.5.7 leaves >> of a negative number to the compiler. */
static inline int32_t tilt_mirror_shift(int32_t x, unsigned n)
{
    return (x < 0) ? ~(~x >> n) : (x >> n);
}

void tilt_mirror_reset(
    tilt_mirror_state *state,
    tilt_mirror_code position,
    tilt_mirror_code output)
{
    /* kr_down: -0.9100341796875 code per count, one step is 2^-14 code per count */
    static const int16_t kr_down = -14910;
    /* kp_up: 1.29998779296875 code per count, one step is 2^-14 code per count */
    static const int16_t kp_up = 21299;

    /* start_position: position to start at, -2048 .. 2047, one step is 1 count */
    int16_t start_position = position;
    if (start_position < -2048) {
        start_position = -2048;
    }
    if (start_position > 2047) {
        start_position = 2047;
    }

    /* start_output: code to start with, -1800 .. 1800, one step is 1 code */
    int16_t start_output = output;
    if (start_output < -1800) {
        start_output = -1800;
    }
    if (start_output > 1800) {
        start_output = 1800;
    }

    /*
     * start_integral: integral that gives the code there, -180000000 .. 180000000, one step is
     * 2^-16 code
     * start_integral = limited(start_output + kr_down start_position + kp_up start_position)
     * every partial sum lies in -414529288 .. 414503732, 2 of 31 bits to spare
     */
    int32_t start_integral = (int32_t)start_output * 65536
        + (int32_t)kr_down * start_position * 4
        + (int32_t)kp_up * start_position * 4;
    if (start_integral < -180000000) {
        start_integral = -180000000;
    }
    if (start_integral > 180000000) {
        start_integral = 180000000;
    }

    /*
     * start_notched: code on both sides of the notch, -14400 .. 14400, one step is 2^-3 code
     * start_notched = start_output
     * every partial sum lies in -14400 .. 14400, 17 of 31 bits to spare
     */
    const int32_t start_notched_wide = (int32_t)start_output * 8;
    const int16_t start_notched = (int16_t)start_notched_wide; /* proven: -14400 .. 14400 */

    state->position_count_before = start_position;
    state->rate_before = 0;
    state->rate_rest = 0;
    state->integral_before = start_integral;
    state->wanted_before = start_notched;
    state->wanted_before2 = start_notched;
    state->notched_before = start_notched;
    state->notched_before2 = start_notched;
    state->notched_rest = 0;
    state->excess = 0;
}

tilt_mirror_code tilt_mirror_update_added(
    tilt_mirror_state *state,
    tilt_mirror_code reference,
    tilt_mirror_code position,
    tilt_mirror_code added)
{
    /* rate_decay: -0.3759765625, one step is 2^-11 */
    static const int16_t rate_decay = -770;
    /* rate_gain: 14.169921875 code per count, one step is 2^-11 code per count */
    static const int16_t rate_gain = 29020;
    /* ki: 0.0300140380859375 code per count, one step is 2^-16 code per count */
    static const int16_t ki = 1967;
    /* kr: 0.9100341796875 code per count, one step is 2^-14 code per count */
    static const int16_t kr = 14910;
    /* kp: -1.29998779296875 code per count, one step is 2^-14 code per count */
    static const int16_t kp = -21299;
    /* notch_b0: 0.9000244140625, one step is 2^-13 */
    static const int16_t notch_b0 = 7373;
    /* notch_b1: -1.5999755859375, one step is 2^-13 */
    static const int16_t notch_b1 = -13107;
    /* notch_b2: 0.8099365234375, one step is 2^-13 */
    static const int16_t notch_b2 = 6635;
    /* notch_a1: 1.5999755859375, one step is 2^-13 */
    static const int16_t notch_a1 = 13107;
    /* notch_a2: -0.7099609375, one step is 2^-13 */
    static const int16_t notch_a2 = -5816;

    /* position_count: measured position, -2048 .. 2047, one step is 1 count */
    int16_t position_count = position;
    if (position_count < -2048) {
        position_count = -2048;
    }
    if (position_count > 2047) {
        position_count = 2047;
    }

    /* reference_count: position asked for, -2048 .. 2047, one step is 1 count */
    int16_t reference_count = reference;
    if (reference_count < -2048) {
        reference_count = -2048;
    }
    if (reference_count > 2047) {
        reference_count = 2047;
    }

    /* added_code: codes added by the caller, -2047 .. 2047, one step is 1 code */
    int16_t added_code = added;
    if (added_code < -2047) {
        added_code = -2047;
    }
    if (added_code > 2047) {
        added_code = 2047;
    }

    /*
     * change: change of position since the last sample, -4095 .. 4095, one step is 1 count
     * change = position_count - position_count[1]
     * every partial sum lies in -4095 .. 4095, 19 of 31 bits to spare
     */
    const int32_t change_wide = (int32_t)position_count - (int32_t)state->position_count_before;
    const int16_t change = (int16_t)change_wide; /* proven: -4095 .. 4095 */

    /*
     * rate: part of the output that opposes speed, -32767 .. 32767, one step is 2^-3 code
     * rate = limited(rounded(rate_rest + rate[1] + rate_decay rate[1] + rate_gain change))
     * every partial sum lies in -1043033630 .. 1043034653, 1 of 31 bits to spare
     */
    const int32_t rate_sum = state->rate_rest
        + (int32_t)state->rate_before * 2048
        + (int32_t)rate_decay * state->rate_before
        + (int32_t)rate_gain * change * 8;
    int32_t rate_wide = tilt_mirror_shift(rate_sum + 1024, 11);
    const int32_t rate_rest = rate_sum - rate_wide * 2048;
    if (rate_wide < -32767) {
        rate_wide = -32767;
    }
    if (rate_wide > 32767) {
        rate_wide = 32767;
    }
    const int16_t rate = (int16_t)rate_wide; /* within its limit */

    /*
     * error: reference less position, -4095 .. 4095, one step is 1 count
     * error = reference_count - position_count
     * every partial sum lies in -4095 .. 4095, 19 of 31 bits to spare
     */
    const int32_t error_wide = (int32_t)reference_count - (int32_t)position_count;
    const int16_t error = (int16_t)error_wide; /* proven: -4095 .. 4095 */

    /*
     * integral: integral part of the output, -180000000 .. 180000000, one step is 2^-16 code
     * integral = limited(integral[1] + ki error - 1/4 excess[1])
     * every partial sum lies in -220822865 .. 220822865, 3 of 31 bits to spare
     */
    int32_t integral = state->integral_before
        + (int32_t)ki * error
        - (int32_t)state->excess * 16384;
    if (integral < -180000000) {
        integral = -180000000;
    }
    if (integral > 180000000) {
        integral = 180000000;
    }

    /*
     * wanted: output before the notch, -32767 .. 32767, one step is 2^-3 code
     * wanted = limited(rounded(integral + kr reference_count + kp position_count - rate +
     * added_code))
     * every partial sum lies in -879118388 .. 879148040, 1 of 31 bits to spare
     */
    const int32_t wanted_sum = integral
        + (int32_t)kr * reference_count * 4
        + (int32_t)kp * position_count * 4
        - (int32_t)rate * 8192
        + (int32_t)added_code * 65536;
    int32_t wanted_wide = tilt_mirror_shift(wanted_sum + 4096, 13);
    if (wanted_wide < -32767) {
        wanted_wide = -32767;
    }
    if (wanted_wide > 32767) {
        wanted_wide = 32767;
    }
    const int16_t wanted = (int16_t)wanted_wide; /* within its limit */

    /*
     * notched: output behind the notch, -32767 .. 32767, one step is 2^-3 code
     * notched = limited(rounded(notched_rest + notch_b0 wanted + notch_b1 wanted[1] + notch_b2
     * wanted[2] + notch_a1 notched[1] + notch_a2 notched[2]))
     * every partial sum lies in -1508531242 .. 1508535337, 0 of 31 bits to spare
     */
    const int32_t notched_sum = state->notched_rest
        + (int32_t)notch_b0 * wanted
        + (int32_t)notch_b1 * state->wanted_before
        + (int32_t)notch_b2 * state->wanted_before2
        + (int32_t)notch_a1 * state->notched_before
        + (int32_t)notch_a2 * state->notched_before2;
    int32_t notched_wide = tilt_mirror_shift(notched_sum + 4096, 13);
    const int32_t notched_rest = notched_sum - notched_wide * 8192;
    if (notched_wide < -32767) {
        notched_wide = -32767;
    }
    if (notched_wide > 32767) {
        notched_wide = 32767;
    }
    const int16_t notched = (int16_t)notched_wide; /* within its limit */

    /*
     * unlimited: output before its limit, -4096 .. 4096, one step is 1 code
     * unlimited = rounded(notched)
     * every partial sum lies in -32767 .. 32771, 15 of 31 bits to spare
     */
    const int32_t unlimited_sum = (int32_t)notched;
    const int32_t unlimited_wide = tilt_mirror_shift(unlimited_sum + 4, 3);
    const int16_t unlimited = (int16_t)unlimited_wide; /* proven: -4096 .. 4096 */

    /* output_code: returned code, -1800 .. 1800, one step is 1 code */
    int16_t output_code = unlimited;
    if (output_code < -1800) {
        output_code = -1800;
    }
    if (output_code > 1800) {
        output_code = 1800;
    }

    /*
     * excess: what the limit took away, -2000 .. 2000, one step is 1 code
     * excess = limited(unlimited - output_code)
     * every partial sum lies in -5896 .. 5896, 18 of 31 bits to spare
     */
    int32_t excess_wide = (int32_t)unlimited - (int32_t)output_code;
    if (excess_wide < -2000) {
        excess_wide = -2000;
    }
    if (excess_wide > 2000) {
        excess_wide = 2000;
    }
    const int16_t excess = (int16_t)excess_wide; /* within its limit */

    state->wanted_before2 = state->wanted_before;
    state->notched_before2 = state->notched_before;
    state->position_count_before = position_count;
    state->rate_before = rate;
    state->integral_before = integral;
    state->wanted_before = wanted;
    state->notched_before = notched;
    state->excess = excess;
    state->rate_rest = rate_rest;
    state->notched_rest = notched_rest;

    return output_code;
}

tilt_mirror_code tilt_mirror_update(
    tilt_mirror_state *state,
    tilt_mirror_code reference,
    tilt_mirror_code position)
{
    return tilt_mirror_update_added(state, reference, position, 0);
}

tilt_mirror_code tilt_mirror_resting_output(
    tilt_mirror_code position)
{
    /* spring: 0.399993896484375 code per count, one step is 2^-16 code per count */
    static const int16_t spring = 26214;

    /* rest_position: position to rest at, -2048 .. 2047, one step is 1 count */
    int16_t rest_position = position;
    if (rest_position < -2048) {
        rest_position = -2048;
    }
    if (rest_position > 2047) {
        rest_position = 2047;
    }

    /*
     * rest_code: code that holds the hinge there, -1800 .. 1800, one step is 1 code
     * rest_code = limited(rounded(spring rest_position))
     * every partial sum lies in -53686272 .. 53692826, 5 of 31 bits to spare
     */
    const int32_t rest_code_sum = (int32_t)spring * rest_position;
    int32_t rest_code_wide = tilt_mirror_shift(rest_code_sum + 32768, 16);
    if (rest_code_wide < -1800) {
        rest_code_wide = -1800;
    }
    if (rest_code_wide > 1800) {
        rest_code_wide = 1800;
    }
    const int16_t rest_code = (int16_t)rest_code_wide; /* within its limit */

    return rest_code;
}

int tilt_mirror_limited(const tilt_mirror_state *state)
{
    if (state->excess > 0) {
        return 1;
    }
    if (state->excess < 0) {
        return -1;
    }
    return 0;
}
