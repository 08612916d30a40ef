/*
 * gauge_table_words.h: the coefficient words alone, for a loop of one's own
 * Table under a gauge, 0.5 µm a count; counts and codes from zeros of their own
 *
 * A coefficient is its word times 2 to the power of minus its fraction bits. The range proofs hold
 * for the arithmetic of gauge_table.c, not for another that uses these words.
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
#ifndef GAUGE_TABLE_WORDS_H
#define GAUGE_TABLE_WORDS_H

#include <stdint.h>

/* 0.625, one step is 2^-14; on rate[1] in rate */
static const int16_t gauge_table_rate_pole = 10240;
enum { gauge_table_rate_pole_frac_bits = 14 };

/* 2.8077392578125 code per count, one step is 2^-13 code per count; on change in rate */
static const int16_t gauge_table_rate_gain = 23001;
enum { gauge_table_rate_gain_frac_bits = 13 };

/*
 * 0.36627197265625 code per count, one step is 2^-14 code per count; on reference_count in
 * unlimited
 */
static const int16_t gauge_table_kr = 6001;
enum { gauge_table_kr_frac_bits = 14 };

/*
 * -0.3499755859375 code per count, one step is 2^-14 code per count; on position_count in unlimited
 */
static const int16_t gauge_table_kp = -5734;
enum { gauge_table_kp_frac_bits = 14 };

/*
 * -0.36627197265625 code per count, one step is 2^-14 code per count; on start_reference in
 * start_standing
 */
static const int16_t gauge_table_kr_down = -6001;
enum { gauge_table_kr_down_frac_bits = 14 };

/*
 * 0.3499755859375 code per count, one step is 2^-14 code per count; on start_position in
 * start_standing
 */
static const int16_t gauge_table_kp_up = 5734;
enum { gauge_table_kp_up_frac_bits = 14 };

/*
 * 0.01667022705078125 code per count, one step is 2^-18 code per count; on rest_position in
 * rest_limited
 */
static const int16_t gauge_table_spring = 4370;
enum { gauge_table_spring_frac_bits = 18 };

#endif
