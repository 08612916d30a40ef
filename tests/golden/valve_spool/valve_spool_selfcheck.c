/*
 * valve_spool_selfcheck.c: does this machine repeat the stored words?
 * Spool of a proportional valve; counts and codes run backward
 *
 * valve_spool_selfcheck returns 0 when it does, else the number of the first entry, counted from 1,
 * whose words differ. Run it once on the processor that is used, built as the product is built. It
 * calls nothing but the functions of valve_spool.h and keeps its stored words in constant memory.
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

int valve_spool_selfcheck(void);

static int valve_spool_same_state(
    const valve_spool_state *a,
    const valve_spool_state *b)
{
    return a->error_before == b->error_before
        && a->lead_before == b->lead_before
        && a->standing_output == b->standing_output
        && a->excess == b->excess;
}

int valve_spool_selfcheck(void)
{
    enum { from_state, same_state, reset, update, update_added, resting_output };

    static const valve_spool_state states[] = {
        {0, 0, 175921860444160, 0},
        {-140, 0, 181639320529920, 0},
        {155, 0, 174739885821440, 0},
        {0, 0, 162215348604416, 0},
        {0, 0, 439804651110400, 0},
        {-3940, -100000000, -1679174157143040, (-2147483647 - 1)},
        {0, 0, 0, 0},
        {3955, 100000000, 1683709642606080, 2147483647},
        {-3940, -34105600, 0, 54017},
        {0, 1, 0, 0},
        {0, 559, 0, 0},
        {-6, 84475904, -66, -58462},
        {1552, 91809645, -66, -144014},
        {-1623, -93160633, -22478, 40},
        {1535, 31690668, -22478, -49828},
        {2147, -11829248, -3, -814509030},
        {1592, -22039232, -3, 33534},
        {-5, 31947591, 6323, -877885620},
        {-145, 14840576, 6323, -22806},
        {2, 29488, 326009354864, 1},
        {-407, -11133336, 326009354864, 17070},
        {-5, 0, 1006741427707, 117},
        {-140, -3680502, 1006741427707, 5334},
        {178, -3640131, 10001505199598, 7363902},
        {-128, -10468307, 10001505199598, 15898},
        {26, -266, 395135748035, 280480},
        {103, 2099094, 395135748035, -3062},
        {2, -8436, 1154, -230028108},
        {-140, -3876269, 1154, 5442},
        {0, 0, -876811053013461, 23618},
        {3943, 100000000, -876811053013461, -157776},
        {-5, 0, -268, -150795},
        {-139, -3653239, -268, 5330},
        {21, 884, 3240, 0},
        {-3940, -100000000, 3240, 156988},
        {-101, 3325349, 71515, 0},
        {192, 9930056, 71515, -16235},
        {0, 0, -204474197360, 913601926},
        {-96, -2617246, -204474197360, 4697},
        {-47, -148839, -597093, -87},
        {-3902, -100000000, -597093, 156954},
        {-3940, 139559, -35, 29105125},
        {3955, 100000000, -35, -157097},
        {-11, 530861, 5732, -7669},
        {3955, 100000000, 5732, -156980},
        {-202, 31820627, 98542797273, 5112},
        {-3922, -82835024, 98542797273, 130152},
        {901, 22432887, 0, -34473},
        {3, 112900, 0, 0},
        {1, 1, 0, 0},
        {1, -1, 0, 0},
    };

    /*
     * What is asked for; its words: reference, position, added, or position, output, or the number
     * of a stored state; how many times; the code that the last call returns; limited after it.
     */
    static const struct {
        unsigned char ask;
        signed char limited;
        int16_t times;
        valve_spool_code first;
        valve_spool_code second;
        valve_spool_code third;
        valve_spool_code code;
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
        {reset, 0, 1, (-2147483647 - 1), 512, 0, 0},
        {update, 0, 3, (-2147483647 - 1), (-2147483647 - 1), 0, 512},
        {reset, 0, 1, (-2147483647 - 1), 112, 0, 0},
        {update, 0, 3, (-2147483647 - 1), (-2147483647 - 1), 0, 112},
        {reset, 0, 1, (-2147483647 - 1), 912, 0, 0},
        {update, 0, 3, (-2147483647 - 1), (-2147483647 - 1), 0, 912},
        {reset, 0, 1, (-2147483647 - 1), 672, 0, 0},
        {update, 0, 3, (-2147483647 - 1), (-2147483647 - 1), 0, 672},
        {same_state, 0, 1, 1, 0, 0, 0},
        {reset, 0, 1, 2147483647, 512, 0, 0},
        {update, 0, 3, 2147483647, 2147483647, 0, 512},
        {reset, 0, 1, 2147483647, 112, 0, 0},
        {update, 0, 3, 2147483647, 2147483647, 0, 112},
        {reset, 0, 1, 2147483647, 912, 0, 0},
        {update, 0, 3, 2147483647, 2147483647, 0, 912},
        {reset, 0, 1, 2147483647, 672, 0, 0},
        {update, 0, 3, 2147483647, 2147483647, 0, 672},
        {same_state, 0, 1, 2, 0, 0, 0},
        {reset, 0, 1, 2040, (-2147483647 - 1), 0, 0},
        {update, 0, 1, 2040, 2040, 0, 112},
        {reset, 0, 1, 2040, 2147483647, 0, 0},
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
        {resting_output, 0, 1, (-2147483647 - 1), 0, 0, 465},
        {resting_output, 0, 1, -1, 0, 0, 465},
        {resting_output, 0, 1, 0, 0, 0, 465},
        {resting_output, 0, 1, 2039, 0, 0, 512},
        {resting_output, 0, 1, 2040, 0, 0, 512},
        {resting_output, 0, 1, 2041, 0, 0, 512},
        {resting_output, 0, 1, 1, 0, 0, 465},
        {resting_output, 0, 1, 4095, 0, 0, 559},
        {resting_output, 0, 1, 2147483647, 0, 0, 559},
        {resting_output, 0, 1, 1280, 0, 0, 495},
        {resting_output, 0, 1, 3306, 0, 0, 541},
        /* from 84: extremes of the type */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update_added, -1, 1, (-2147483647 - 1), 2147483647, (-2147483647 - 1), 112},
        {update_added, -1, 1, (-2147483647 - 1), 2147483647, 2147483647, 112},
        {update_added, -1, 1, (-2147483647 - 1), 2147483647, 0, 112},
        {update_added, 1, 1, (-2147483647 - 1), (-2147483647 - 1), (-2147483647 - 1), 912},
        {update_added, 1, 1, (-2147483647 - 1), (-2147483647 - 1), 2147483647, 912},
        {update_added, 1, 1, (-2147483647 - 1), (-2147483647 - 1), 0, 912},
        {update_added, 1, 1, 2147483647, 2147483647, (-2147483647 - 1), 912},
        {update_added, 1, 1, 2147483647, 2147483647, 2147483647, 912},
        {update_added, 1, 1, 2147483647, 2147483647, 0, 912},
        {update_added, 1, 1, 2147483647, (-2147483647 - 1), (-2147483647 - 1), 912},
        {update_added, 1, 1, 2147483647, (-2147483647 - 1), 2147483647, 912},
        {update_added, 1, 1, 2147483647, (-2147483647 - 1), 0, 912},
        {same_state, 0, 1, 8, 0, 0, 0},
        /* from 98: the limit from both sides, and back */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 1, 1, 3940, 2040, 0, 912},
        {update, 1, 20, 3940, 2040, 0, 912},
        {update, -1, 3, 2040, 3940, 0, 112},
        {update, 1, 8, 2040, 2040, 0, 912},
        {update, 1, 1, 2040, 2040, 0, 912},
        {update, 0, 20, 2040, 2040, 0, 512},
        {update, 0, 3, 2040, 2040, 0, 512},
        {update, 0, 8, 2040, 2040, 0, 512},
        {update, -1, 1, 140, 2040, 0, 112},
        {update, -1, 20, 140, 2040, 0, 112},
        {update, 1, 3, 2040, 140, 0, 912},
        {update, -1, 8, 2040, 2040, 0, 112},
        {update, -1, 1, 2040, 2040, 0, 112},
        {update, 0, 20, 2040, 2040, 0, 512},
        {update, 0, 3, 2040, 2040, 0, 512},
        {update, 0, 8, 2040, 2040, 0, 512},
        {same_state, 0, 1, 9, 0, 0, 0},
        /* from 116: small steps */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 0, 1, 2041, 2040, 0, 555},
        {update, 0, 4, 2041, 2040, 0, 517},
        {update, 0, 1, 2040, 2041, 0, 429},
        {update, 0, 4, 2040, 2041, 0, 502},
        {update, 0, 1, 2039, 2040, 0, 506},
        {update, 0, 4, 2039, 2040, 0, 511},
        {update, 0, 1, 2040, 2039, 0, 597},
        {update, 0, 4, 2040, 2039, 0, 522},
        {update, 0, 1, 2042, 2040, 0, 561},
        {update, 0, 4, 2042, 2040, 0, 518},
        {update, 0, 1, 2040, 2042, 0, 344},
        {update, 0, 4, 2040, 2042, 0, 492},
        {update, 0, 1, 2037, 2040, 0, 457},
        {update, 0, 4, 2037, 2040, 0, 505},
        {update, 0, 1, 2040, 2037, 0, 765},
        {update, 0, 4, 2040, 2037, 0, 542},
        {update, 0, 1, 2040, 2040, 0, 401},
        {update, 0, 4, 2040, 2040, 0, 499},
        {update, 0, 1, 2040, 2040, 0, 504},
        {update, 0, 4, 2040, 2040, 0, 511},
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
        {update_added, -1, 1, 141, 1676, -246, 112},
        {same_state, 0, 1, 14, 0, 0, 0},
        {from_state, 0, 1, 15, 0, 0, 0},
        {update_added, 1, 1, 162, 1754, -21, 912},
        {same_state, 0, 1, 16, 0, 0, 0},
        {from_state, 0, 1, 17, 0, 0, 0},
        {update_added, -1, 1, 145, 0, -14, 112},
        {same_state, 0, 1, 18, 0, 0, 0},
        {from_state, 0, 1, 19, 0, 0, 0},
        {update_added, 1, 1, 407, 0, -1, 912},
        {same_state, 0, 1, 20, 0, 0, 0},
        {from_state, 0, 1, 21, 0, 0, 0},
        {update_added, 1, 1, 140, 0, -12, 912},
        {same_state, 0, 1, 22, 0, 0, 0},
        {from_state, 0, 1, 23, 0, 0, 0},
        {update_added, 1, 1, 278, 150, -63, 912},
        {same_state, 0, 1, 24, 0, 0, 0},
        {from_state, 0, 1, 25, 0, 0, 0},
        {update_added, -1, 1, 140, 243, -110, 112},
        {same_state, 0, 1, 26, 0, 0, 0},
        {resting_output, 0, 1, 1540, 0, 0, 501},
        {resting_output, 0, 1, 2540, 0, 0, 523},
        /* from 172: every limit from both sides */
        {from_state, 0, 1, 27, 0, 0, 0},
        {update_added, 1, 1, 140, (-2147483647 - 1), -209, 912},
        {same_state, 0, 1, 28, 0, 0, 0},
        {from_state, 0, 1, 29, 0, 0, 0},
        {update_added, -1, 1, 152, 2147483647, -1, 112},
        {same_state, 0, 1, 30, 0, 0, 0},
        {from_state, 0, 1, 31, 0, 0, 0},
        {update_added, 1, 1, (-2147483647 - 1), 1, 27, 912},
        {same_state, 0, 1, 32, 0, 0, 0},
        {from_state, 0, 1, 33, 0, 0, 0},
        {update_added, 1, 1, 2147483647, 0, 11, 912},
        {same_state, 0, 1, 34, 0, 0, 0},
        {from_state, 0, 1, 35, 0, 0, 0},
        {update_added, -1, 1, 140, 332, (-2147483647 - 1), 112},
        {same_state, 0, 1, 36, 0, 0, 0},
        {from_state, 0, 1, 37, 0, 0, 0},
        {update_added, 1, 1, 222, 126, 2147483647, 912},
        {same_state, 0, 1, 38, 0, 0, 0},
        {from_state, 0, 1, 39, 0, 0, 0},
        {update_added, 1, 1, 2147483647, 38, -13, 912},
        {same_state, 0, 1, 40, 0, 0, 0},
        {from_state, 0, 1, 41, 0, 0, 0},
        {update_added, -1, 1, (-2147483647 - 1), 2147483647, -116, 112},
        {same_state, 0, 1, 42, 0, 0, 0},
        {from_state, 0, 1, 43, 0, 0, 0},
        {update_added, -1, 1, (-2147483647 - 1), 2147483647, 1, 112},
        {same_state, 0, 1, 44, 0, 0, 0},
        {from_state, 0, 1, 45, 0, 0, 0},
        {update_added, 1, 1, 2147483647, 18, 0, 912},
        {same_state, 0, 1, 46, 0, 0, 0},
        /* from 202: noise over the whole range */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 1, 1, 3472, 1187, 0, 912},
        {update, -1, 1, 518, 2501, 0, 112},
        {update, 1, 1, 175, 325, 0, 912},
        {update_added, 1, 1, 3340, 1122, 841, 912},
        {update, -1, 1, 777, 2752, 0, 112},
        {update, 1, 1, 2094, 1703, 0, 912},
        {update, 1, 1, 422, 180, 0, 912},
        {update_added, -1, 1, 1580, 3008, 213, 112},
        {update, 1, 1, 772, 721, 0, 912},
        {update, 1, 1, 3779, 1115, 0, 912},
        {update, -1, 1, 2490, 3222, 0, 112},
        {update_added, 1, 1, 3613, 1645, 693, 912},
        {update, -1, 1, 301, 2927, 0, 112},
        {update, 0, 1, 3351, 3873, 0, 841},
        {update, -1, 1, 239, 2403, 0, 112},
        {update_added, -1, 1, 307, 3638, 887, 112},
        {update, 1, 1, 2348, 2845, 0, 912},
        {update, 1, 1, 3456, 1981, 0, 912},
        {update, 1, 1, 3371, 2098, 0, 912},
        {update_added, -1, 1, 3171, 3952, 333, 112},
        {update, 1, 1, 1901, 813, 0, 912},
        {update, -1, 1, 344, 225, 0, 112},
        {update, -1, 1, 1867, 3318, 0, 112},
        {update_added, 1, 1, 3766, 1244, 761, 912},
        {update, -1, 1, 1332, 2446, 0, 112},
        {update, -1, 1, 967, 1753, 0, 112},
        {update, -1, 1, 2208, 3012, 0, 112},
        {update_added, 1, 1, 867, 216, 138, 912},
        {update, 1, 1, 3163, 1518, 0, 912},
        {update, -1, 1, 2678, 3299, 0, 112},
        {update, -1, 1, 3258, 3627, 0, 112},
        {update_added, -1, 1, 2280, 3181, 421, 112},
        {same_state, 0, 1, 47, 0, 0, 0},
        /* from 236: noise of a few counts */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 0, 1, 2041, 2043, 0, 426},
        {update, 0, 1, 2043, 2041, 0, 633},
        {update, 0, 1, 2043, 2037, 0, 755},
        {update, 0, 1, 2042, 2041, 0, 440},
        {update, 0, 1, 2043, 2037, 0, 684},
        {update, 0, 1, 2043, 2040, 0, 485},
        {update, 0, 1, 2041, 2041, 0, 368},
        {update, 0, 1, 2042, 2040, 0, 514},
        {update, 0, 1, 2037, 2039, 0, 342},
        {update, 0, 1, 2041, 2039, 0, 584},
        {update, 0, 1, 2043, 2037, 0, 726},
        {update, 0, 1, 2040, 2037, 0, 509},
        {update, 0, 1, 2037, 2037, 0, 382},
        {update, 0, 1, 2038, 2038, 0, 436},
        {update, 0, 1, 2040, 2038, 0, 553},
        {update, 0, 1, 2037, 2040, 0, 322},
        {update, 0, 1, 2043, 2038, 0, 744},
        {update, 0, 1, 2042, 2038, 0, 605},
        {update, 0, 1, 2037, 2041, 0, 224},
        {update, 0, 1, 2043, 2037, 0, 772},
        {update, 0, 1, 2037, 2039, 0, 321},
        {update, 0, 1, 2037, 2040, 0, 358},
        {update, 0, 1, 2041, 2037, 0, 722},
        {update, 0, 1, 2037, 2040, 0, 335},
        {same_state, 0, 1, 48, 0, 0, 0},
        /* from 262: held levels */
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 0, 5, 2116, 2040, 0, 911},
        {update, 0, 45, 2116, 2040, 0, 535},
        {update, 0, 250, 2116, 2040, 0, 535},
        {update, 0, 100, 2040, 2041, 0, 512},
        {same_state, 0, 1, 49, 0, 0, 0},
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, -1, 5, 1945, 2040, 0, 112},
        {update, 0, 45, 1945, 2040, 0, 484},
        {update, 0, 250, 1945, 2040, 0, 484},
        {update, 0, 100, 2040, 2041, 0, 512},
        {same_state, 0, 1, 50, 0, 0, 0},
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, 1, 5, 3306, 2040, 0, 912},
        {update, 0, 45, 3306, 2040, 0, 889},
        {update, 0, 250, 3306, 2040, 0, 889},
        {update, 0, 100, 2040, 2041, 0, 512},
        {same_state, 0, 1, 49, 0, 0, 0},
        {reset, 0, 1, 2040, 512, 0, 0},
        {update, -1, 5, 773, 2040, 0, 112},
        {update, 0, 45, 773, 2040, 0, 134},
        {update, 0, 250, 773, 2040, 0, 134},
        {update, 0, 100, 2040, 2041, 0, 512},
        {same_state, 0, 1, 50, 0, 0, 0},
    };

    valve_spool_state state = states[0];
    int i;

    for (i = 0; i < 285; i++) {
        valve_spool_code code = rows[i].code;
        int limited = rows[i].limited;
        int16_t n;

        for (n = 0; n < rows[i].times; n++) {
            switch (rows[i].ask) {
            case from_state:
                state = states[rows[i].first];
                break;
            case same_state:
                if (!valve_spool_same_state(&state, &states[rows[i].first])) {
                    return i + 1;
                }
                break;
            case reset:
                valve_spool_reset(&state, rows[i].first, rows[i].second);
                break;
            case update:
                code = valve_spool_update(
                    &state, rows[i].first, rows[i].second);
                limited = valve_spool_limited(&state);
                break;
            case update_added:
                code = valve_spool_update_added(
                    &state, rows[i].first, rows[i].second, rows[i].third);
                limited = valve_spool_limited(&state);
                break;
            default:
                code = valve_spool_resting_output(rows[i].first);
                break;
            }
        }
        if (code != rows[i].code || limited != rows[i].limited) {
            return i + 1;
        }
    }
    return 0;
}
