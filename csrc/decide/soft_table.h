/* Making a table of a smooth function of the reading. */
#ifndef LM_SOFT_TABLE_H
#define LM_SOFT_TABLE_H

#include "../limen.h"

typedef struct {
    lm_soft_exact *values;
    const void *context;
    double centre, scale; /* where the readings are, and their smallest scale */
    lm_range bulk;        /* what the table should cover, however many segments that takes */
    size_t breaks;        /* readings at which the function may jump or bend: segments end there */
    const double *at;     /* ascending */
} lm_soft_function;

LM_MUST_USE lm_status lm_soft_compile(const lm_soft_function *function, lm_soft **out);

#endif
