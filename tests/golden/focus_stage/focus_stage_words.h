/*
 * focus_stage_words.h: the coefficient words alone, for a loop of one's own
 * Flexure-guided objective of a slide scanner
 *
 * A coefficient is its word times 2 to the power of minus its fraction bits. The range proofs hold
 * for the arithmetic of focus_stage.c, not for another that uses these words.
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
#ifndef FOCUS_STAGE_WORDS_H
#define FOCUS_STAGE_WORDS_H

#include <stdint.h>

/* -0.3757957457564771, one step is 2^-31; on rate[1] in rate */
static const int32_t focus_stage_rate_decay = -807015219;
enum { focus_stage_rate_decay_frac_bits = 31 };

/* 14.169964596629143 code per count, one step is 2^-26 code per count; on change in rate */
static const int32_t focus_stage_rate_gain = 950930227;
enum { focus_stage_rate_gain_frac_bits = 26 };

/*
 * 1.3466000026091933 code per count, one step is 2^-30 code per count; on reference_count in
 * unlimited
 */
static const int32_t focus_stage_kr = 1445900743;
enum { focus_stage_kr_frac_bits = 30 };

/*
 * -1.2940001282840967 code per count, one step is 2^-30 code per count; on position_count in
 * unlimited
 */
static const int32_t focus_stage_kp = -1389422058;
enum { focus_stage_kp_frac_bits = 30 };

/*
 * -1.3466000026091933 code per count, one step is 2^-30 code per count; on start_reference in
 * start_standing
 */
static const int32_t focus_stage_kr_down = -1445900743;
enum { focus_stage_kr_down_frac_bits = 30 };

/*
 * 1.2940001282840967 code per count, one step is 2^-30 code per count; on start_position in
 * start_standing
 */
static const int32_t focus_stage_kp_up = 1389422058;
enum { focus_stage_kp_up_frac_bits = 30 };

/*
 * 0.052663887006929144 code per count, one step is 2^-35 code per count; on rest_position in
 * rest_code
 */
static const int32_t focus_stage_spring = 1809517379;
enum { focus_stage_spring_frac_bits = 35 };

#endif
