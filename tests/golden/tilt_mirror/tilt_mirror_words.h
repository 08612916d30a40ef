/*
 * tilt_mirror_words.h: the coefficient words alone, for a loop of one's own
 * Mirror on a torsion hinge, with a notch on its second mode
 *
 * Written although it does not keep what was asked of it:
 *   - overshoot = 7.2 %, limit 5 %: missed
 *   - load: not judged, no cycle count
 *
 * A coefficient is its word times 2 to the power of minus its fraction bits. The range proofs hold
 * for the arithmetic of tilt_mirror.c, not for another that uses these words.
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
#ifndef TILT_MIRROR_WORDS_H
#define TILT_MIRROR_WORDS_H

#include <stdint.h>

/* -0.3759765625, one step is 2^-11; on rate[1] in rate */
static const int16_t tilt_mirror_rate_decay = -770;
enum { tilt_mirror_rate_decay_frac_bits = 11 };

/* 14.169921875 code per count, one step is 2^-11 code per count; on change in rate */
static const int16_t tilt_mirror_rate_gain = 29020;
enum { tilt_mirror_rate_gain_frac_bits = 11 };

/* 0.0300140380859375 code per count, one step is 2^-16 code per count; on error in integral */
static const int16_t tilt_mirror_ki = 1967;
enum { tilt_mirror_ki_frac_bits = 16 };

/* 0.9100341796875 code per count, one step is 2^-14 code per count; on reference_count in wanted */
static const int16_t tilt_mirror_kr = 14910;
enum { tilt_mirror_kr_frac_bits = 14 };

/*
 * -1.29998779296875 code per count, one step is 2^-14 code per count; on position_count in wanted
 */
static const int16_t tilt_mirror_kp = -21299;
enum { tilt_mirror_kp_frac_bits = 14 };

/* 0.9000244140625, one step is 2^-13; on wanted in notched */
static const int16_t tilt_mirror_notch_b0 = 7373;
enum { tilt_mirror_notch_b0_frac_bits = 13 };

/* -1.5999755859375, one step is 2^-13; on wanted[1] in notched */
static const int16_t tilt_mirror_notch_b1 = -13107;
enum { tilt_mirror_notch_b1_frac_bits = 13 };

/* 0.8099365234375, one step is 2^-13; on wanted[2] in notched */
static const int16_t tilt_mirror_notch_b2 = 6635;
enum { tilt_mirror_notch_b2_frac_bits = 13 };

/* 1.5999755859375, one step is 2^-13; on notched[1] in notched */
static const int16_t tilt_mirror_notch_a1 = 13107;
enum { tilt_mirror_notch_a1_frac_bits = 13 };

/* -0.7099609375, one step is 2^-13; on notched[2] in notched */
static const int16_t tilt_mirror_notch_a2 = -5816;
enum { tilt_mirror_notch_a2_frac_bits = 13 };

/*
 * -0.9100341796875 code per count, one step is 2^-14 code per count; on start_position in
 * start_integral
 */
static const int16_t tilt_mirror_kr_down = -14910;
enum { tilt_mirror_kr_down_frac_bits = 14 };

/*
 * 1.29998779296875 code per count, one step is 2^-14 code per count; on start_position in
 * start_integral
 */
static const int16_t tilt_mirror_kp_up = 21299;
enum { tilt_mirror_kp_up_frac_bits = 14 };

/*
 * 0.399993896484375 code per count, one step is 2^-16 code per count; on rest_position in rest_code
 */
static const int16_t tilt_mirror_spring = 26214;
enum { tilt_mirror_spring_frac_bits = 16 };

#endif
