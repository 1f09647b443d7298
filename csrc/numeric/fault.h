/* Filling a fault: one line where an argument is refused. */
#ifndef LM_FAULT_H
#define LM_FAULT_H

#include "../limen.h"

/* Returns status after filling fault (if there is one). */
static inline lm_status lm_refuse(lm_fault *fault, lm_status status, const char *argument, double value,
                                  ptrdiff_t index, const char *expected)
{
    if (fault != NULL)
        *fault = (lm_fault){.argument = argument, .expected = expected, .value = value, .index = index};
    return status;
}

#endif
