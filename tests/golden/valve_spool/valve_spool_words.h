/*
 * valve_spool_words.h: the coefficient words alone, for a loop of one's own
 * Spool of a proportional valve; counts and codes run backward
 *
 * A coefficient is its word times 2 to the power of minus its fraction bits. The range proofs hold
 * for the arithmetic of valve_spool.c, not for another that uses these words.
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
#ifndef VALVE_SPOOL_WORDS_H
#define VALVE_SPOOL_WORDS_H

#include <stdint.h>

/* 0.5839999997988343, one step is 2^-31; on lead[1] in lead */
static const int32_t valve_spool_lead_pole = 1254130450;
enum { valve_spool_lead_pole_frac_bits = 31 };

/* 0.4159999997355044, one step is 2^-31; on error in lead */
static const int32_t valve_spool_lead_gain = 893353197;
enum { valve_spool_lead_gain_frac_bits = 31 };

/* -0.4159999997355044, one step is 2^-31; on error[1] in lead */
static const int32_t valve_spool_lead_gain_before = -893353197;
enum { valve_spool_lead_gain_before_frac_bits = 31 };

/* -0.27499999990686774 code per count, one step is 2^-32 code per count; on error in unlimited */
static const int32_t valve_spool_k_error = -1181116006;
enum { valve_spool_k_error_frac_bits = 32 };

/* -102.39999997615814 code per count, one step is 2^-24 code per count; on lead in unlimited */
static const int32_t valve_spool_k_lead = -1717986918;
enum { valve_spool_k_lead_frac_bits = 24 };

/*
 * 0.02299999981187284 code per count, one step is 2^-32 code per count; on reference_count in
 * unlimited
 */
static const int32_t valve_spool_k_spring = 98784247;
enum { valve_spool_k_spring_frac_bits = 32 };

/*
 * -0.02299999981187284 code per count, one step is 2^-32 code per count; on start_reference in
 * start_standing
 */
static const int32_t valve_spool_k_spring_down = -98784247;
enum { valve_spool_k_spring_down_frac_bits = 32 };

/*
 * 0.27499999990686774 code per count, one step is 2^-32 code per count; on start_error in
 * start_standing
 */
static const int32_t valve_spool_k_error_up = 1181116006;
enum { valve_spool_k_error_up_frac_bits = 32 };

#endif
