/*
 * focus_stage_selfcheck.c: does this machine repeat the stored words?
 * Flexure-guided objective of a slide scanner
 *
 * focus_stage_selfcheck returns 0 when it does, else the number of the first entry, counted from 1,
 * whose words differ. Run it once on the processor that is used, built as the product is built. It
 * calls nothing but the functions of focus_stage.h and keeps its stored words in constant memory.
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

int focus_stage_selfcheck(void);

static int focus_stage_same_state(
    const focus_stage_state *a,
    const focus_stage_state *b)
{
    return a->position_count_before == b->position_count_before
        && a->rate_before == b->rate_before
        && a->rate_rest == b->rate_rest
        && a->standing_output == b->standing_output
        && a->excess == b->excess;
}

int focus_stage_selfcheck(void)
{
    enum { from_state, same_state, reset, update, update_added, resting_output };

    static const focus_stage_state states[] = {
        {0, 0, 0, 703300894720, 0},
        {-8192, 0, 0, 691718838536, 0},
        {8191, 0, 0, 713493528846, 0},
        {2246, 0, 0, 576449768210, 0},
        {0, 0, 0, 1758789107712, 0},
        {-8192, -1073741823, -1073741824, -24511498049800, -2147483647},
        {0, 0, 0, 0, 0},
        {8191, 1073741823, 1073741823, 24510108627742, 2147483647},
        {-8192, -299632759, -917236769, 0, 92705},
        {0, 3, 820686027, 0, 0},
        {0, 2254, 49140970, 0, 0},
        {-2, 900235244, 4, -3856, -2562840},
        {-6166, 204171031, -1073741824, -3856, -40236},
        {124, 324872391, -7004, 0, -19909},
        {-2, 195473666, 1073741823, 0, -46082},
        {3925, -552891295, 10835, -12382, -15869759},
        {-24, -574317749, -1073741824, -12382, 137141},
        {1, -467136267, -112357426, 2, 0},
        {-12, -292342968, 1073741823, 2, 69716},
        {-7304, -3454, 1631, 607156681, -86799},
        {-675, 384746164, -15921031, 607156681, -94438},
        {0, 7, 0, 252674896, -254358},
        {-1678, -97391409, -558532197, 252674896, 24211},
        {0, -15, 18, 150131765, 331951},
        {6503, 377435249, -896458737, 150131765, -98444},
        {0, -6218339, 62974, 446644244, -17},
        {-6, -4229755, 627009719, 446644244, 246},
        {0, -224709469, 137081, -46, 557141},
        {-8192, -615729720, -39812608, -46, 159278},
        {1, -719, -1978451, 8683, -14743784},
        {8191, 475348584, 743554026, 8683, -125800},
        {154, 54931645, -10, -306848, -366362},
        {-12, 24653897, 974144335, -306848, -14899},
        {19, -379127736, -772, 206976, 0},
        {-45, -240367717, 188690084, 206976, 67692},
        {-944, -8419, 0, -28560110, 884},
        {-18, 53739947, -294033863, -28560110, -14971},
        {-53, -29278874, 22, 338288, -280281580},
        {-465, -42188550, 418263748, 338288, 13406},
        {8191, -1073741823, 713, 1, -11},
        {-8192, -1073741823, 642510742, 1, 262769},
        {-8192, 1073741823, -285452888, 20808791465, -113},
        {8191, 1073741823, -927962917, 20808791465, -266468},
        {34, 2621504, 7286099, 33215, 117721313},
        {1434, 82892599, -138256237, 33215, -20345},
        {82, -2357065, 285, -27, 65908},
        {0, -6230584, -750604376, -27, 10468},
        {-7205, -546415681, -572967863, 0, 139254},
        {-3, -213846, 1036264905, 0, 0},
        {1, 0, 861214889, 0, 0},
    };

    /*
     * What is asked for; its words: reference, position, added, or position, output, or the number
     * of a stored state; how many times; the code that the last call returns; limited after it.
     */
    static const struct {
        unsigned char ask;
        signed char limited;
        int16_t times;
        focus_stage_code first;
        focus_stage_code second;
        focus_stage_code third;
        focus_stage_code code;
    } rows[] = {
        /* from 1: at rest: the code of reset comes back */
        {reset, 0, 1, 0, 0, 0, 0},
        {update, 0, 3, 0, 0, 0, 0},
        {reset, 0, 1, 0, -1638, 0, 0},
        {update, 0, 3, 0, 0, 0, -1638},
        {reset, 0, 1, 0, 1638, 0, 0},
        {update, 0, 3, 0, 0, 0, 1638},
        {reset, 0, 1, 0, 655, 0, 0},
        {update, 0, 3, 0, 0, 0, 655},
        {same_state, 0, 1, 0, 0, 0, 0},
        {reset, 0, 1, -8192, 0, 0, 0},
        {update, 0, 3, -8192, -8192, 0, 0},
        {reset, 0, 1, -8192, -1638, 0, 0},
        {update, 0, 3, -8192, -8192, 0, -1638},
        {reset, 0, 1, -8192, 1638, 0, 0},
        {update, 0, 3, -8192, -8192, 0, 1638},
        {reset, 0, 1, -8192, 655, 0, 0},
        {update, 0, 3, -8192, -8192, 0, 655},
        {same_state, 0, 1, 1, 0, 0, 0},
        {reset, 0, 1, 8191, 0, 0, 0},
        {update, 0, 3, 8191, 8191, 0, 0},
        {reset, 0, 1, 8191, -1638, 0, 0},
        {update, 0, 3, 8191, 8191, 0, -1638},
        {reset, 0, 1, 8191, 1638, 0, 0},
        {update, 0, 3, 8191, 8191, 0, 1638},
        {reset, 0, 1, 8191, 655, 0, 0},
        {update, 0, 3, 8191, 8191, 0, 655},
        {same_state, 0, 1, 2, 0, 0, 0},
        {reset, 0, 1, 2246, 0, 0, 0},
        {update, 0, 3, 2246, 2246, 0, 0},
        {reset, 0, 1, 2246, -1638, 0, 0},
        {update, 0, 3, 2246, 2246, 0, -1638},
        {reset, 0, 1, 2246, 1638, 0, 0},
        {update, 0, 3, 2246, 2246, 0, 1638},
        {reset, 0, 1, 2246, 655, 0, 0},
        {update, 0, 3, 2246, 2246, 0, 655},
        {same_state, 0, 1, 3, 0, 0, 0},
        {reset, 0, 1, (-2147483647 - 1), 0, 0, 0},
        {update, 0, 3, (-2147483647 - 1), (-2147483647 - 1), 0, 0},
        {reset, 0, 1, (-2147483647 - 1), -1638, 0, 0},
        {update, 0, 3, (-2147483647 - 1), (-2147483647 - 1), 0, -1638},
        {reset, 0, 1, (-2147483647 - 1), 1638, 0, 0},
        {update, 0, 3, (-2147483647 - 1), (-2147483647 - 1), 0, 1638},
        {reset, 0, 1, (-2147483647 - 1), 655, 0, 0},
        {update, 0, 3, (-2147483647 - 1), (-2147483647 - 1), 0, 655},
        {same_state, 0, 1, 1, 0, 0, 0},
        {reset, 0, 1, 2147483647, 0, 0, 0},
        {update, 0, 3, 2147483647, 2147483647, 0, 0},
        {reset, 0, 1, 2147483647, -1638, 0, 0},
        {update, 0, 3, 2147483647, 2147483647, 0, -1638},
        {reset, 0, 1, 2147483647, 1638, 0, 0},
        {update, 0, 3, 2147483647, 2147483647, 0, 1638},
        {reset, 0, 1, 2147483647, 655, 0, 0},
        {update, 0, 3, 2147483647, 2147483647, 0, 655},
        {same_state, 0, 1, 2, 0, 0, 0},
        {reset, 0, 1, 0, (-2147483647 - 1), 0, 0},
        {update, 0, 1, 0, 0, 0, -1638},
        {reset, 0, 1, 0, 2147483647, 0, 0},
        {update, 0, 1, 0, 0, 0, 1638},
        {same_state, 0, 1, 4, 0, 0, 0},
        {from_state, 0, 1, 5, 0, 0, 0},
        {reset, 0, 1, 0, 0, 0, 0},
        {same_state, 0, 1, 6, 0, 0, 0},
        {from_state, 0, 1, 7, 0, 0, 0},
        {reset, 0, 1, 0, 0, 0, 0},
        {same_state, 0, 1, 6, 0, 0, 0},
        /* from 66: one code beyond the limit */
        {reset, 0, 1, 0, -1638, 0, 0},
        {update_added, -1, 1, 0, 0, -1, -1638},
        {update_added, 0, 1, 0, 0, 1, -1637},
        {reset, 0, 1, 0, 1638, 0, 0},
        {update_added, 1, 1, 0, 0, 1, 1638},
        {update_added, 0, 1, 0, 0, -1, 1637},
        {same_state, 0, 1, 4, 0, 0, 0},
        /* from 73: code that holds a position */
        {resting_output, 0, 1, (-2147483647 - 1), 0, 0, -431},
        {resting_output, 0, 1, -8193, 0, 0, -431},
        {resting_output, 0, 1, -8192, 0, 0, -431},
        {resting_output, 0, 1, -1, 0, 0, 0},
        {resting_output, 0, 1, 0, 0, 0, 0},
        {resting_output, 0, 1, 1, 0, 0, 0},
        {resting_output, 0, 1, 1, 0, 0, 0},
        {resting_output, 0, 1, 8191, 0, 0, 431},
        {resting_output, 0, 1, 2147483647, 0, 0, 431},
        {resting_output, 0, 1, -3145, 0, 0, -166},
        {resting_output, 0, 1, 5242, 0, 0, 276},
        /* from 84: extremes of the type */
        {reset, 0, 1, 0, 0, 0, 0},
        {update_added, -1, 1, (-2147483647 - 1), 2147483647, (-2147483647 - 1), -1638},
        {update_added, -1, 1, (-2147483647 - 1), 2147483647, 2147483647, -1638},
        {update_added, -1, 1, (-2147483647 - 1), 2147483647, 0, -1638},
        {update_added, 1, 1, (-2147483647 - 1), (-2147483647 - 1), (-2147483647 - 1), 1638},
        {update_added, 1, 1, (-2147483647 - 1), (-2147483647 - 1), 2147483647, 1638},
        {update_added, 1, 1, (-2147483647 - 1), (-2147483647 - 1), 0, 1638},
        {update_added, -1, 1, 2147483647, 2147483647, (-2147483647 - 1), -1638},
        {update_added, -1, 1, 2147483647, 2147483647, 2147483647, -1638},
        {update_added, -1, 1, 2147483647, 2147483647, 0, -1638},
        {update_added, 1, 1, 2147483647, (-2147483647 - 1), (-2147483647 - 1), 1638},
        {update_added, 1, 1, 2147483647, (-2147483647 - 1), 2147483647, 1638},
        {update_added, 1, 1, 2147483647, (-2147483647 - 1), 0, 1638},
        {same_state, 0, 1, 8, 0, 0, 0},
        /* from 98: the limit from both sides, and back */
        {reset, 0, 1, 0, 0, 0, 0},
        {update, 1, 1, 7864, 0, 0, 1638},
        {update, 1, 20, 7864, 0, 0, 1638},
        {update, -1, 3, 0, 7864, 0, -1638},
        {update, 1, 8, 0, 0, 0, 1638},
        {update, 1, 1, 0, 0, 0, 1638},
        {update, 0, 20, 0, 0, 0, 0},
        {update, 0, 3, 0, 0, 0, 0},
        {update, 0, 8, 0, 0, 0, 0},
        {update, -1, 1, -7864, 0, 0, -1638},
        {update, -1, 20, -7864, 0, 0, -1638},
        {update, 1, 3, 0, -7864, 0, 1638},
        {update, -1, 8, 0, 0, 0, -1638},
        {update, -1, 1, 0, 0, 0, -1638},
        {update, 0, 20, 0, 0, 0, 0},
        {update, 0, 3, 0, 0, 0, 0},
        {update, 0, 8, 0, 0, 0, 0},
        {same_state, 0, 1, 9, 0, 0, 0},
        /* from 116: small steps */
        {reset, 0, 1, 0, 0, 0, 0},
        {update, 0, 1, 1, 0, 0, 1},
        {update, 0, 4, 1, 0, 0, 1},
        {update, 0, 1, 0, 1, 0, -15},
        {update, 0, 4, 0, 1, 0, -3},
        {update, 0, 1, -1, 0, 0, 11},
        {update, 0, 4, -1, 0, 0, 1},
        {update, 0, 1, 0, -1, 0, 17},
        {update, 0, 4, 0, -1, 0, 4},
        {update, 0, 1, 2, 0, 0, -10},
        {update, 0, 4, 2, 0, 0, 1},
        {update, 0, 1, 0, 2, 0, -32},
        {update, 0, 4, 0, 2, 0, -7},
        {update, 0, 1, -3, 0, 0, 22},
        {update, 0, 4, -3, 0, 0, 0},
        {update, 0, 1, 0, -3, 0, 49},
        {update, 0, 4, 0, -3, 0, 11},
        {update, 0, 1, 0, 0, 0, -38},
        {update, 0, 4, 0, 0, 0, -6},
        {update, 0, 1, 0, 0, 0, -4},
        {update, 0, 4, 0, 0, 0, -1},
        {same_state, 0, 1, 10, 0, 0, 0},
        /* from 138: codes added */
        {reset, 0, 1, 0, 0, 0, 0},
        {update_added, 0, 2, 0, 0, 1, 1},
        {update_added, 0, 2, 0, 0, -1, -1},
        {update_added, 0, 2, 0, 0, 0, 0},
        {update_added, 0, 2, 0, 0, 5, 5},
        {update_added, 0, 2, 0, 0, 819, 819},
        {update_added, 0, 2, 0, 0, -819, -819},
        {same_state, 0, 1, 6, 0, 0, 0},
        /* from 146: exact ties of every rounding, and just below */
        {from_state, 0, 1, 11, 0, 0, 0},
        {update_added, -1, 1, 0, -6166, -6, -1638},
        {same_state, 0, 1, 12, 0, 0, 0},
        {from_state, 0, 1, 13, 0, 0, 0},
        {update_added, -1, 1, 1, -2, -1, -1638},
        {same_state, 0, 1, 14, 0, 0, 0},
        {from_state, 0, 1, 15, 0, 0, 0},
        {update_added, 1, 1, 176, -24, -1703, 1638},
        {same_state, 0, 1, 16, 0, 0, 0},
        {from_state, 0, 1, 17, 0, 0, 0},
        {update_added, 1, 1, -59, -12, 45, 1638},
        {same_state, 0, 1, 18, 0, 0, 0},
        {from_state, 0, 1, 19, 0, 0, 0},
        {update_added, -1, 1, -1, -675, -3017, -1638},
        {same_state, 0, 1, 20, 0, 0, 0},
        {from_state, 0, 1, 21, 0, 0, 0},
        {update_added, 1, 1, 5, -1678, -106, 1638},
        {same_state, 0, 1, 22, 0, 0, 0},
        {from_state, 0, 1, 23, 0, 0, 0},
        {update_added, -1, 1, 391, 6503, -47, -1638},
        {same_state, 0, 1, 24, 0, 0, 0},
        {from_state, 0, 1, 25, 0, 0, 0},
        {update_added, 1, 1, 25, -6, 810, 1638},
        {same_state, 0, 1, 26, 0, 0, 0},
        {resting_output, 0, 1, 4073, 0, 0, 215},
        {resting_output, 0, 1, -4073, 0, 0, -215},
        /* from 172: every limit from both sides */
        {from_state, 0, 1, 27, 0, 0, 0},
        {update_added, 1, 1, -11, (-2147483647 - 1), 6, 1638},
        {same_state, 0, 1, 28, 0, 0, 0},
        {from_state, 0, 1, 29, 0, 0, 0},
        {update_added, -1, 1, -631, 2147483647, 63, -1638},
        {same_state, 0, 1, 30, 0, 0, 0},
        {from_state, 0, 1, 31, 0, 0, 0},
        {update_added, -1, 1, (-2147483647 - 1), -12, 56, -1638},
        {same_state, 0, 1, 32, 0, 0, 0},
        {from_state, 0, 1, 33, 0, 0, 0},
        {update_added, 1, 1, 2147483647, -45, -1, 1638},
        {same_state, 0, 1, 34, 0, 0, 0},
        {from_state, 0, 1, 35, 0, 0, 0},
        {update_added, -1, 1, 433, -18, (-2147483647 - 1), -1638},
        {same_state, 0, 1, 36, 0, 0, 0},
        {from_state, 0, 1, 37, 0, 0, 0},
        {update_added, 1, 1, 35, -465, 2147483647, 1638},
        {same_state, 0, 1, 38, 0, 0, 0},
        {from_state, 0, 1, 39, 0, 0, 0},
        {update_added, 1, 1, -6200, (-2147483647 - 1), 11, 1638},
        {same_state, 0, 1, 40, 0, 0, 0},
        {from_state, 0, 1, 41, 0, 0, 0},
        {update_added, -1, 1, 3435, 2147483647, -8, -1638},
        {same_state, 0, 1, 42, 0, 0, 0},
        {from_state, 0, 1, 43, 0, 0, 0},
        {update_added, -1, 1, 71, 1434, 14, -1638},
        {same_state, 0, 1, 44, 0, 0, 0},
        {from_state, 0, 1, 45, 0, 0, 0},
        {update_added, 1, 1, 2147483647, 0, -5, 1638},
        {same_state, 0, 1, 46, 0, 0, 0},
        /* from 202: noise over the whole range */
        {reset, 0, 1, 0, 0, 0, 0},
        {update, -1, 1, -6705, 1, 0, -1638},
        {update, -1, 1, 3207, 2144, 0, -1638},
        {update, -1, 1, -6189, 3886, 0, -1638},
        {update_added, 1, 1, -1798, -6315, 845, 1638},
        {update, 1, 1, -4539, -2692, 0, 1638},
        {update, 1, 1, -871, -2776, 0, 1638},
        {update, -1, 1, 1633, 7514, 0, -1638},
        {update_added, 1, 1, -716, -2766, 1060, 1638},
        {update, -1, 1, -5127, 1428, 0, -1638},
        {update, 1, 1, -6000, -5047, 0, 1638},
        {update, -1, 1, -4498, 6396, 0, -1638},
        {update_added, 1, 1, -3142, -6958, -1526, 1638},
        {update, 0, 1, -1858, -1727, 0, -432},
        {update, -1, 1, -1611, 8146, 0, -1638},
        {update, -1, 1, -4592, 5861, 0, -1638},
        {update_added, 1, 1, 7578, -573, 451, 1638},
        {update, 1, 1, 6047, -4970, 0, 1638},
        {update, -1, 1, -3445, 803, 0, -1638},
        {update, -1, 1, 6287, 6673, 0, -1638},
        {update_added, -1, 1, -5684, 7378, 592, -1638},
        {update, 1, 1, 1787, 2892, 0, 1638},
        {update, -1, 1, 2899, 4064, 0, -1638},
        {update, 1, 1, -282, 2128, 0, 1638},
        {update_added, 1, 1, 754, -305, -1471, 1638},
        {update, 0, 1, -4137, 1359, 0, 278},
        {update, 1, 1, 1718, 1525, 0, 1638},
        {update, 1, 1, -5868, -4868, 0, 1638},
        {update_added, -1, 1, 1899, 3027, 247, -1638},
        {update, 1, 1, 7591, -3473, 0, 1638},
        {update, 1, 1, 4185, -1520, 0, 1638},
        {update, -1, 1, 1012, 7773, 0, -1638},
        {update_added, 1, 1, -1521, -7205, 215, 1638},
        {same_state, 0, 1, 47, 0, 0, 0},
        /* from 236: noise of a few counts */
        {reset, 0, 1, 0, 0, 0, 0},
        {update, 0, 1, -1, 1, 0, -17},
        {update, 0, 1, -2, -1, 0, 18},
        {update, 0, 1, 1, -2, 0, 30},
        {update, 0, 1, -2, -3, 0, 32},
        {update, 0, 1, -3, 1, 0, -43},
        {update, 0, 1, 2, 2, 0, -38},
        {update, 0, 1, 3, 0, 0, 9},
        {update, 0, 1, 0, 2, 0, -28},
        {update, 0, 1, 3, 1, 0, 1},
        {update, 0, 1, -2, 2, 0, -20},
        {update, 0, 1, 1, -2, 0, 51},
        {update, 0, 1, 0, -2, 0, 32},
        {update, 0, 1, -2, 1, 0, -28},
        {update, 0, 1, -3, -3, 0, 41},
        {update, 0, 1, -3, -1, 0, -5},
        {update, 0, 1, -3, 0, 0, -20},
        {update, 0, 1, -2, -1, 0, 3},
        {update, 0, 1, 2, -3, 0, 38},
        {update, 0, 1, 1, -2, 0, 9},
        {update, 0, 1, -2, -1, 0, -12},
        {update, 0, 1, 2, 2, 0, -49},
        {update, 0, 1, -3, 0, 0, -6},
        {update, 0, 1, -1, 2, 0, -34},
        {update, 0, 1, 3, -3, 0, 60},
        {same_state, 0, 1, 48, 0, 0, 0},
        /* from 262: held levels */
        {reset, 0, 1, 0, 0, 0, 0},
        {update, 0, 5, 314, 0, 0, 423},
        {update, 0, 45, 314, 0, 0, 423},
        {update, 0, 250, 314, 0, 0, 423},
        {update, 0, 100, 0, 1, 0, -1},
        {same_state, 0, 1, 49, 0, 0, 0},
        {reset, 0, 1, 0, 0, 0, 0},
        {update, 0, 5, -394, 0, 0, -531},
        {update, 0, 45, -394, 0, 0, -531},
        {update, 0, 250, -394, 0, 0, -531},
        {update, 0, 100, 0, 1, 0, -1},
        {same_state, 0, 1, 49, 0, 0, 0},
        {reset, 0, 1, 0, 0, 0, 0},
        {update, 1, 5, 5242, 0, 0, 1638},
        {update, 1, 45, 5242, 0, 0, 1638},
        {update, 1, 250, 5242, 0, 0, 1638},
        {update, 0, 100, 0, 1, 0, -1},
        {same_state, 0, 1, 49, 0, 0, 0},
        {reset, 0, 1, 0, 0, 0, 0},
        {update, -1, 5, -5243, 0, 0, -1638},
        {update, -1, 45, -5243, 0, 0, -1638},
        {update, -1, 250, -5243, 0, 0, -1638},
        {update, 0, 100, 0, 1, 0, -1},
        {same_state, 0, 1, 49, 0, 0, 0},
    };

    focus_stage_state state = states[0];
    int i;

    for (i = 0; i < 285; i++) {
        focus_stage_code code = rows[i].code;
        int limited = rows[i].limited;
        int16_t n;

        for (n = 0; n < rows[i].times; n++) {
            switch (rows[i].ask) {
            case from_state:
                state = states[rows[i].first];
                break;
            case same_state:
                if (!focus_stage_same_state(&state, &states[rows[i].first])) {
                    return i + 1;
                }
                break;
            case reset:
                focus_stage_reset(&state, rows[i].first, rows[i].second);
                break;
            case update:
                code = focus_stage_update(
                    &state, rows[i].first, rows[i].second);
                limited = focus_stage_limited(&state);
                break;
            case update_added:
                code = focus_stage_update_added(
                    &state, rows[i].first, rows[i].second, rows[i].third);
                limited = focus_stage_limited(&state);
                break;
            default:
                code = focus_stage_resting_output(rows[i].first);
                break;
            }
        }
        if (code != rows[i].code || limited != rows[i].limited) {
            return i + 1;
        }
    }
    return 0;
}
