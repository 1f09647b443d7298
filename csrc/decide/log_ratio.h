/* Log odds of some laws against others at a reading, and what a table of them must know. */
#ifndef LM_LOG_RATIO_H
#define LM_LOG_RATIO_H

#include "gap.h"

typedef struct {
    lm_density *density; /* retained */
    double log_prior;
    bool positive; /* for the odds, or against them */
} lm_law;

struct lm_log_ratio {
    size_t laws;
    lm_law *law;
    lm_gap gap;       /* all their terms; no workspace */
    bool masses;      /* some reading has a mass of its own */
    bool fallible;    /* a term calls out */
    bool probability; /* the value is 1 / (1 + exp(-log odds)) */
};

#endif
