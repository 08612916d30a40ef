/* The emitted functions for many lanes at once, samples in the outer loop; NAME and HEADER given. */
#include HEADER

#define PASTE(a, b) a##_##b
#define JOIN(a, b) PASTE(a, b)
#define CODE JOIN(NAME, code)
#define STATE JOIN(NAME, state)

long state_size(void)
{
    return (long)sizeof(STATE);
}

void updates(long samples, long lanes, STATE *states, const CODE *reference, const CODE *position,
    const CODE *added, CODE *codes, signed char *limited)
{
    for (long k = 0; k < samples; k++) {
        for (long i = 0; i < lanes; i++) {
            const long at = k * lanes + i;

            /* Both entries are used: the one without added codes wherever it says the same. */
            if (added[at] == 0 && (i & 1)) {
                codes[at] = JOIN(NAME, update)(&states[i], reference[at], position[at]);
            } else {
                codes[at] = JOIN(NAME, update_added)(&states[i], reference[at], position[at],
                    added[at]);
            }
            limited[at] = (signed char)JOIN(NAME, limited)(&states[i]);
        }
    }
}

void resets(long lanes, STATE *states, const CODE *position, const CODE *output)
{
    for (long i = 0; i < lanes; i++) {
        JOIN(NAME, reset)(&states[i], position[i], output[i]);
    }
}

void resting_outputs(long lanes, const CODE *position, CODE *codes)
{
    for (long i = 0; i < lanes; i++) {
        codes[i] = JOIN(NAME, resting_output)(position[i]);
    }
}
