/*
 * gauge_table_selfcheck.c: does this machine repeat the stored words?
 * Table under a gauge, 0.5 µm a count; counts and codes from zeros of their own
 *
 * gauge_table_selfcheck returns 0 when it does, else the number of the first entry, counted from 1,
 * whose words differ. Run it once on the processor that is used, built as the product is built. It
 * calls nothing but the functions of gauge_table.h and keeps its stored words in constant memory.
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

int gauge_table_selfcheck(void);

static int gauge_table_same_state(
    const gauge_table_state *a,
    const gauge_table_state *b)
{
    return a->position_count_before == b->position_count_before
        && a->rate_before == b->rate_before
        && a->rate_rest == b->rate_rest
        && a->standing_output == b->standing_output
        && a->excess == b->excess;
}

int gauge_table_selfcheck(void)
{
    enum { from_state, same_state, reset, update, update_added, resting_output };

    static const gauge_table_state states[] = {
        {0, 0, 0, -10485760, 0},
        {2040, 0, 0, -9303920, 0},
        {-2055, 0, 0, -12011640, 0},
        {-542, 0, 0, -9906904, 0},
        {0, 0, 0, -26214400, 0},
        {-2055, -32767, -8192, -118955480, -8744},
        {0, 0, 0, 0, 0},
        {2040, 32767, 8191, 118611440, 8744},
        {2040, 12800, -5248, 0, 2610},
        {0, 0, -6144, 0, 0},
        {0, -1, -2048, 0, 0},
        {4, -253, 96, -46, 0},
        {14, 67, -8192, -46, -659},
        {1, -43, -2401, 895223, -768},
        {1799, 32767, 8191, 895223, 4116},
        {-2005, 24, 160, -5, -45},
        {1553, 32767, -8192, -5, 3718},
        {6, -6, -5729, 12, 0},
        {2012, 32767, 8191, 12, 3534},
        {0, 726, 4, 33408, 148},
        {1986, 32767, 1828, 33408, 3732},
        {635, 105, 218, 19111, -24},
        {2014, 31041, -6262, 19111, 3501},
        {-3, -13, -1784, -1615840, 3},
        {2026, 32767, -168, -1615840, 3823},
        {-4, 450, -55, -6142413, 0},
        {1866, 32767, 425, -6142413, 3754},
        {0, 1575, 0, -9973, 7},
        {-2055, -32767, 2320, -9973, -5077},
        {-15, -186, -5, -68546959, -1681},
        {2040, 32767, -277, -68546959, 4943},
        {811, 210, -1575, 16, -422},
        {2038, 27692, -1271, 16, 4469},
        {-1087, -105, -58, -1399, 68},
        {2033, 32767, -7482, -1399, 5118},
        {0, -13, 2, 95835, -49},
        {2038, 32767, 4194, 95835, 3829},
        {73, 2, -178, -1955074, 7573},
        {2027, 32767, -2962, -1955074, 3739},
        {-125, -705, -5, -334, 0},
        {2040, 32767, 6859, -334, 5905},
        {-152, 64, 26, 2132929, 132},
        {2039, 32767, 906, 2132929, 2658},
        {-12, -10, 0, 1022134, -2582},
        {-2055, -32767, 976, 1022134, -5302},
        {-313, -13375, -75, 0, 1},
        {2035, 32767, 3189, 0, 3435},
        {-1, 27, 266, -28151, 54},
        {2040, 32767, -5606, -28151, 3811},
        {0, 27, -1622, -74, 129},
        {-2055, -32767, -7494, -74, -5109},
        {-605, -26151, -1360, 0, -2993},
        {-2, -43, 5344, 0, 0},
        {-1, 0, -5520, 0, 0},
    };

    /*
     * What is asked for; its words: reference, position, added, or position, output, or the number
     * of a stored state; how many times; the code that the last call returns; limited after it.
     */
    static const struct {
        unsigned char ask;
        signed char limited;
        int16_t times;
        gauge_table_code first;
        gauge_table_code second;
        gauge_table_code third;
        gauge_table_code code;
    } rows[] = {
        /* from 1: at rest: the code of reset comes back */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 0, 3, 2040, 2040, 0, 512},
        {reset, 0, 1, 2040, 112, 0, 0},
        {update, 0, 3, 2040, 2040, 0, 112},
        {reset, 0, 1, 2040, 912, 0, 0},
        {update, 0, 3, 2040, 2040, 0, 912},
        {reset, 0, 1, 2040, 672, 0, 0},
        {update, 0, 3, 2040, 2040, 0, 672},
        {same_state, 0, 1, 0, 0, 0, 0},
        {reset, 0, 1, 0, 512, 0, 0},
        {update, 0, 3, 0, 0, 0, 512},
        {reset, 0, 1, 0, 112, 0, 0},
        {update, 0, 3, 0, 0, 0, 112},
        {reset, 0, 1, 0, 912, 0, 0},
        {update, 0, 3, 0, 0, 0, 912},
        {reset, 0, 1, 0, 672, 0, 0},
        {update, 0, 3, 0, 0, 0, 672},
        {same_state, 0, 1, 1, 0, 0, 0},
        {reset, 0, 1, 4095, 512, 0, 0},
        {update, 0, 3, 4095, 4095, 0, 512},
        {reset, 0, 1, 4095, 112, 0, 0},
        {update, 0, 3, 4095, 4095, 0, 112},
        {reset, 0, 1, 4095, 912, 0, 0},
        {update, 0, 3, 4095, 4095, 0, 912},
        {reset, 0, 1, 4095, 672, 0, 0},
        {update, 0, 3, 4095, 4095, 0, 672},
        {same_state, 0, 1, 2, 0, 0, 0},
        {reset, 0, 1, 2582, 512, 0, 0},
        {update, 0, 3, 2582, 2582, 0, 512},
        {reset, 0, 1, 2582, 112, 0, 0},
        {update, 0, 3, 2582, 2582, 0, 112},
        {reset, 0, 1, 2582, 912, 0, 0},
        {update, 0, 3, 2582, 2582, 0, 912},
        {reset, 0, 1, 2582, 672, 0, 0},
        {update, 0, 3, 2582, 2582, 0, 672},
        {same_state, 0, 1, 3, 0, 0, 0},
        {reset, 0, 1, (-32767 - 1), 512, 0, 0},
        {update, 0, 3, (-32767 - 1), (-32767 - 1), 0, 512},
        {reset, 0, 1, (-32767 - 1), 112, 0, 0},
        {update, 0, 3, (-32767 - 1), (-32767 - 1), 0, 112},
        {reset, 0, 1, (-32767 - 1), 912, 0, 0},
        {update, 0, 3, (-32767 - 1), (-32767 - 1), 0, 912},
        {reset, 0, 1, (-32767 - 1), 672, 0, 0},
        {update, 0, 3, (-32767 - 1), (-32767 - 1), 0, 672},
        {same_state, 0, 1, 1, 0, 0, 0},
        {reset, 0, 1, 32767, 512, 0, 0},
        {update, 0, 3, 32767, 32767, 0, 512},
        {reset, 0, 1, 32767, 112, 0, 0},
        {update, 0, 3, 32767, 32767, 0, 112},
        {reset, 0, 1, 32767, 912, 0, 0},
        {update, 0, 3, 32767, 32767, 0, 912},
        {reset, 0, 1, 32767, 672, 0, 0},
        {update, 0, 3, 32767, 32767, 0, 672},
        {same_state, 0, 1, 2, 0, 0, 0},
        {reset, 0, 1, 2040, (-32767 - 1), 0, 0},
        {update, 0, 1, 2040, 2040, 0, 112},
        {reset, 0, 1, 2040, 32767, 0, 0},
        {update, 0, 1, 2040, 2040, 0, 912},
        {same_state, 0, 1, 4, 0, 0, 0},
        {from_state, 0, 1, 5, 0, 0, 0},
        {reset, 0, 1, 2040, 512, 0, 0},
        {same_state, 0, 1, 6, 0, 0, 0},
        {from_state, 0, 1, 7, 0, 0, 0},
        {reset, 0, 1, 2040, 512, 0, 0},
        {same_state, 0, 1, 6, 0, 0, 0},
        /* from 66: one code beyond the limit */
        {reset, 0, 1, 2040, 112, 0, 0},
        {update_added, -1, 1, 2040, 2040, -1, 112},
        {update_added, 0, 1, 2040, 2040, 1, 113},
        {reset, 0, 1, 2040, 912, 0, 0},
        {update_added, 1, 1, 2040, 2040, 1, 912},
        {update_added, 0, 1, 2040, 2040, -1, 911},
        {same_state, 0, 1, 4, 0, 0, 0},
        /* from 73: code that holds a position */
        {resting_output, 0, 1, (-32767 - 1), 0, 0, 478},
        {resting_output, 0, 1, -1, 0, 0, 478},
        {resting_output, 0, 1, 0, 0, 0, 478},
        {resting_output, 0, 1, 2039, 0, 0, 512},
        {resting_output, 0, 1, 2040, 0, 0, 512},
        {resting_output, 0, 1, 2041, 0, 0, 512},
        {resting_output, 0, 1, 1, 0, 0, 478},
        {resting_output, 0, 1, 4095, 0, 0, 546},
        {resting_output, 0, 1, 32767, 0, 0, 546},
        {resting_output, 0, 1, 1280, 0, 0, 499},
        {resting_output, 0, 1, 3306, 0, 0, 533},
        /* from 84: extremes of the type */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update_added, -1, 1, (-32767 - 1), 32767, (-32767 - 1), 112},
        {update_added, -1, 1, (-32767 - 1), 32767, 32767, 112},
        {update_added, -1, 1, (-32767 - 1), 32767, 0, 112},
        {update_added, 1, 1, (-32767 - 1), (-32767 - 1), (-32767 - 1), 912},
        {update_added, 1, 1, (-32767 - 1), (-32767 - 1), 32767, 912},
        {update_added, 1, 1, (-32767 - 1), (-32767 - 1), 0, 912},
        {update_added, -1, 1, 32767, 32767, (-32767 - 1), 112},
        {update_added, -1, 1, 32767, 32767, 32767, 112},
        {update_added, -1, 1, 32767, 32767, 0, 112},
        {update_added, 1, 1, 32767, (-32767 - 1), (-32767 - 1), 912},
        {update_added, 1, 1, 32767, (-32767 - 1), 32767, 912},
        {update_added, 1, 1, 32767, (-32767 - 1), 0, 912},
        {same_state, 0, 1, 8, 0, 0, 0},
        /* from 98: the limit from both sides, and back */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 1, 1, 3940, 2040, 0, 912},
        {update, 1, 20, 3940, 2040, 0, 912},
        {update, -1, 3, 2040, 3940, 0, 112},
        {update, 0, 8, 2040, 2040, 0, 664},
        {update, 0, 1, 2040, 2040, 0, 607},
        {update, 0, 20, 2040, 2040, 0, 512},
        {update, 0, 3, 2040, 2040, 0, 512},
        {update, 0, 8, 2040, 2040, 0, 512},
        {update, -1, 1, 140, 2040, 0, 112},
        {update, -1, 20, 140, 2040, 0, 112},
        {update, 1, 3, 2040, 140, 0, 912},
        {update, 0, 8, 2040, 2040, 0, 359},
        {update, 0, 1, 2040, 2040, 0, 417},
        {update, 0, 20, 2040, 2040, 0, 512},
        {update, 0, 3, 2040, 2040, 0, 512},
        {update, 0, 8, 2040, 2040, 0, 512},
        {same_state, 0, 1, 9, 0, 0, 0},
        /* from 116: small steps */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 0, 1, 2041, 2040, 0, 512},
        {update, 0, 4, 2041, 2040, 0, 512},
        {update, 0, 1, 2040, 2041, 0, 509},
        {update, 0, 4, 2040, 2041, 0, 511},
        {update, 0, 1, 2039, 2040, 0, 514},
        {update, 0, 4, 2039, 2040, 0, 512},
        {update, 0, 1, 2040, 2039, 0, 515},
        {update, 0, 4, 2040, 2039, 0, 513},
        {update, 0, 1, 2042, 2040, 0, 510},
        {update, 0, 4, 2042, 2040, 0, 512},
        {update, 0, 1, 2040, 2042, 0, 505},
        {update, 0, 4, 2040, 2042, 0, 510},
        {update, 0, 1, 2037, 2040, 0, 516},
        {update, 0, 4, 2037, 2040, 0, 512},
        {update, 0, 1, 2040, 2037, 0, 522},
        {update, 0, 4, 2040, 2037, 0, 514},
        {update, 0, 1, 2040, 2040, 0, 504},
        {update, 0, 4, 2040, 2040, 0, 511},
        {update, 0, 1, 2040, 2040, 0, 511},
        {update, 0, 4, 2040, 2040, 0, 512},
        {same_state, 0, 1, 10, 0, 0, 0},
        /* from 138: codes added */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update_added, 0, 2, 2040, 2040, 1, 513},
        {update_added, 0, 2, 2040, 2040, -1, 511},
        {update_added, 0, 2, 2040, 2040, 0, 512},
        {update_added, 0, 2, 2040, 2040, 5, 517},
        {update_added, 0, 2, 2040, 2040, 200, 712},
        {update_added, 0, 2, 2040, 2040, -200, 312},
        {same_state, 0, 1, 6, 0, 0, 0},
        /* from 146: exact ties of every rounding, and just below */
        {from_state, 0, 1, 11, 0, 0, 0},
        {update_added, -1, 1, 474, 2026, -499, 112},
        {same_state, 0, 1, 12, 0, 0, 0},
        {from_state, 0, 1, 13, 0, 0, 0},
        {update_added, 1, 1, 1505, 241, 0, 912},
        {same_state, 0, 1, 14, 0, 0, 0},
        {from_state, 0, 1, 15, 0, 0, 0},
        {update_added, 1, 1, 630, 487, -5, 912},
        {same_state, 0, 1, 16, 0, 0, 0},
        {from_state, 0, 1, 17, 0, 0, 0},
        {update_added, 1, 1, 197, 28, -191, 912},
        {same_state, 0, 1, 18, 0, 0, 0},
        {from_state, 0, 1, 19, 0, 0, 0},
        {update_added, 1, 1, 140, 54, 38, 912},
        {same_state, 0, 1, 20, 0, 0, 0},
        {from_state, 0, 1, 21, 0, 0, 0},
        {update_added, 1, 1, 142, 26, 11, 912},
        {same_state, 0, 1, 22, 0, 0, 0},
        {from_state, 0, 1, 23, 0, 0, 0},
        {update_added, 1, 1, 388, 14, -1, 912},
        {same_state, 0, 1, 24, 0, 0, 0},
        {from_state, 0, 1, 25, 0, 0, 0},
        {update_added, 1, 1, 153, 174, 2, 912},
        {same_state, 0, 1, 26, 0, 0, 0},
        {resting_output, 0, 1, 2010, 0, 0, 511},
        {resting_output, 0, 1, 2070, 0, 0, 513},
        /* from 172: every limit from both sides */
        {from_state, 0, 1, 27, 0, 0, 0},
        {update_added, -1, 1, 236, 32767, -1, 112},
        {same_state, 0, 1, 28, 0, 0, 0},
        {from_state, 0, 1, 29, 0, 0, 0},
        {update_added, 1, 1, 791, (-32767 - 1), -55, 912},
        {same_state, 0, 1, 30, 0, 0, 0},
        {from_state, 0, 1, 31, 0, 0, 0},
        {update_added, 1, 1, 32767, 2, -2, 912},
        {same_state, 0, 1, 32, 0, 0, 0},
        {from_state, 0, 1, 33, 0, 0, 0},
        {update_added, 1, 1, 32767, 7, 15, 912},
        {same_state, 0, 1, 34, 0, 0, 0},
        {from_state, 0, 1, 35, 0, 0, 0},
        {update_added, 1, 1, (-32767 - 1), 2, 117, 912},
        {same_state, 0, 1, 36, 0, 0, 0},
        {from_state, 0, 1, 37, 0, 0, 0},
        {update_added, 1, 1, (-32767 - 1), 13, 0, 912},
        {same_state, 0, 1, 38, 0, 0, 0},
        {from_state, 0, 1, 39, 0, 0, 0},
        {update_added, 1, 1, 3329, 0, 32767, 912},
        {same_state, 0, 1, 40, 0, 0, 0},
        {from_state, 0, 1, 41, 0, 0, 0},
        {update_added, 1, 1, 140, 1, (-32767 - 1), 912},
        {same_state, 0, 1, 42, 0, 0, 0},
        {from_state, 0, 1, 43, 0, 0, 0},
        {update_added, -1, 1, 143, 32767, -177, 112},
        {same_state, 0, 1, 44, 0, 0, 0},
        {from_state, 0, 1, 45, 0, 0, 0},
        {update_added, 1, 1, 144, 5, -279, 912},
        {same_state, 0, 1, 46, 0, 0, 0},
        {from_state, 0, 1, 47, 0, 0, 0},
        {update_added, 1, 1, 407, 0, -1, 912},
        {same_state, 0, 1, 48, 0, 0, 0},
        {from_state, 0, 1, 49, 0, 0, 0},
        {update_added, -1, 1, 140, 32767, 2, 112},
        {same_state, 0, 1, 50, 0, 0, 0},
        /* from 208: noise over the whole range */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 1, 1, 942, 679, 0, 912},
        {update, -1, 1, 1379, 3350, 0, 112},
        {update, 1, 1, 2133, 251, 0, 912},
        {update_added, -1, 1, 2928, 1746, 806, 112},
        {update, -1, 1, 1476, 2826, 0, 112},
        {update, -1, 1, 2834, 2406, 0, 112},
        {update, 1, 1, 977, 1301, 0, 912},
        {update_added, 1, 1, 2798, 916, 140, 912},
        {update, 1, 1, 1302, 276, 0, 912},
        {update, 1, 1, 1539, 459, 0, 912},
        {update, 1, 1, 1037, 432, 0, 912},
        {update_added, -1, 1, 198, 3352, 544, 112},
        {update, 0, 1, 475, 2319, 0, 182},
        {update, 1, 1, 3500, 1274, 0, 912},
        {update, -1, 1, 2675, 2975, 0, 112},
        {update_added, -1, 1, 2717, 3989, 184, 112},
        {update, -1, 1, 421, 3163, 0, 112},
        {update, 1, 1, 938, 1346, 0, 912},
        {update, -1, 1, 2399, 4074, 0, 112},
        {update_added, 1, 1, 3236, 1121, 563, 912},
        {update, -1, 1, 1463, 3055, 0, 112},
        {update, -1, 1, 3824, 3810, 0, 112},
        {update, 1, 1, 188, 1434, 0, 912},
        {update_added, 1, 1, 2429, 1737, 502, 912},
        {update, 1, 1, 511, 685, 0, 912},
        {update, -1, 1, 1642, 2340, 0, 112},
        {update, 1, 1, 1020, 70, 0, 912},
        {update_added, -1, 1, 2868, 3223, 350, 112},
        {update, -1, 1, 1013, 3379, 0, 112},
        {update, -1, 1, 3735, 3852, 0, 112},
        {update, 1, 1, 3726, 569, 0, 912},
        {update_added, -1, 1, 797, 2645, 543, 112},
        {same_state, 0, 1, 51, 0, 0, 0},
        /* from 242: noise of a few counts */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 0, 1, 2042, 2038, 0, 519},
        {update, 0, 1, 2038, 2040, 0, 509},
        {update, 0, 1, 2038, 2037, 0, 519},
        {update, 0, 1, 2040, 2041, 0, 505},
        {update, 0, 1, 2041, 2043, 0, 501},
        {update, 0, 1, 2041, 2037, 0, 524},
        {update, 0, 1, 2039, 2037, 0, 519},
        {update, 0, 1, 2041, 2041, 0, 505},
        {update, 0, 1, 2037, 2037, 0, 519},
        {update, 0, 1, 2039, 2037, 0, 517},
        {update, 0, 1, 2041, 2042, 0, 500},
        {update, 0, 1, 2039, 2038, 0, 516},
        {update, 0, 1, 2037, 2037, 0, 517},
        {update, 0, 1, 2037, 2038, 0, 512},
        {update, 0, 1, 2039, 2039, 0, 509},
        {update, 0, 1, 2043, 2041, 0, 506},
        {update, 0, 1, 2041, 2039, 0, 514},
        {update, 0, 1, 2040, 2037, 0, 519},
        {update, 0, 1, 2039, 2039, 0, 510},
        {update, 0, 1, 2039, 2040, 0, 508},
        {update, 0, 1, 2040, 2037, 0, 519},
        {update, 0, 1, 2041, 2040, 0, 508},
        {update, 0, 1, 2039, 2042, 0, 502},
        {update, 0, 1, 2039, 2042, 0, 506},
        {same_state, 0, 1, 52, 0, 0, 0},
        /* from 268: held levels */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 0, 5, 2116, 2040, 0, 540},
        {update, 0, 45, 2116, 2040, 0, 540},
        {update, 0, 250, 2116, 2040, 0, 540},
        {update, 0, 100, 2040, 2041, 0, 512},
        {same_state, 0, 1, 53, 0, 0, 0},
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 0, 5, 1945, 2040, 0, 477},
        {update, 0, 45, 1945, 2040, 0, 477},
        {update, 0, 250, 1945, 2040, 0, 477},
        {update, 0, 100, 2040, 2041, 0, 512},
        {same_state, 0, 1, 53, 0, 0, 0},
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 1, 5, 3306, 2040, 0, 912},
        {update, 1, 45, 3306, 2040, 0, 912},
        {update, 1, 250, 3306, 2040, 0, 912},
        {update, 0, 100, 2040, 2041, 0, 512},
        {same_state, 0, 1, 53, 0, 0, 0},
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, -1, 5, 773, 2040, 0, 112},
        {update, -1, 45, 773, 2040, 0, 112},
        {update, -1, 250, 773, 2040, 0, 112},
        {update, 0, 100, 2040, 2041, 0, 512},
        {same_state, 0, 1, 53, 0, 0, 0},
    };

    gauge_table_state state = states[0];
    int i;

    for (i = 0; i < 291; i++) {
        gauge_table_code code = rows[i].code;
        int limited = rows[i].limited;
        int16_t n;

        for (n = 0; n < rows[i].times; n++) {
            switch (rows[i].ask) {
            case from_state:
                state = states[rows[i].first];
                break;
            case same_state:
                if (!gauge_table_same_state(&state, &states[rows[i].first])) {
                    return i + 1;
                }
                break;
            case reset:
                gauge_table_reset(&state, rows[i].first, rows[i].second);
                break;
            case update:
                code = gauge_table_update(
                    &state, rows[i].first, rows[i].second);
                limited = gauge_table_limited(&state);
                break;
            case update_added:
                code = gauge_table_update_added(
                    &state, rows[i].first, rows[i].second, rows[i].third);
                limited = gauge_table_limited(&state);
                break;
            default:
                code = gauge_table_resting_output(rows[i].first);
                break;
            }
        }
        if (code != rows[i].code || limited != rows[i].limited) {
            return i + 1;
        }
    }
    return 0;
}
