/* The log likelihood ratio of two densities, and what a table of it must know. */
#ifndef LM_LOG_RATIO_H
#define LM_LOG_RATIO_H

#include "gap.h"

struct lm_log_ratio {
    lm_density *density[2];
    lm_gap gap;    /* terms of the first positive; no workspace */
    bool masses;   /* some reading has a mass of its own */
    bool fallible; /* a term calls out */
};

#endif
