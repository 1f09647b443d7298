/* The gap between two decisions: a signed sum of weighted laws, judged over intervals by bounds that cannot lie.
 *
 * Decision e costs more than decision d at a reading x by sum_i (C[e,i] - C[d,i]) p_i f_i(x). Each term of each density
 * enters with the sign of its coefficient; h = log(sum of positive terms) - log(sum of negative ones) has the sign of
 * the gap and never underflows. d is best where h >= 0, so that a tie goes to the lower index.
 */
#ifndef LM_GAP_H
#define LM_GAP_H

#include "../density/family.h"

typedef struct {
    lm_term term;     /* borrowed; log |coefficient| is in its log_weight */
    double log_scale; /* log of the density's Jacobian; 0 for masses */
    bool positive;
    lm_range support; /* in readings */
} lm_gap_term;

/* What bounds say of one term over a piece, relative to the term that is largest at its middle. */
typedef struct {
    lm_range ratio;   /* log of term / reference */
    lm_range slope;   /* of its derivative in x */
    lm_range slope_u; /* of its derivative in u */
    double at_middle;
    double noise; /* rounding in the ratio, already in its range */
    bool positive;
} lm_gap_bound;

typedef struct {
    size_t count;
    lm_gap_term *term;
    lm_gap_bound *bound; /* workspace, count items */
    size_t *order;       /* workspace, count items */
    double centre;       /* of the coordinate u = asinh((x - centre) / scale), in which all finite doubles are */
    double scale;        /* a few hundred units long */
    bool power_tails;    /* some term has a tail_range */
} lm_gap;

typedef enum {
    LM_GAP_VOID,     /* no term lives here: the decisions cost the same */
    LM_GAP_POSITIVE, /* h > 0 throughout */
    LM_GAP_NEGATIVE,
    LM_GAP_RISING, /* h is monotone: its signs at the ends tell all */
    LM_GAP_FALLING,
    LM_GAP_TIED, /* h is zero to within the rounding of the laws throughout */
    LM_GAP_OPEN,
    LM_GAP_BOUNDLESS, /* a term knows no bounds: only samples can tell */
} lm_verdict;

/* Bounds on h over [low, high], which has no support edge and no kink strictly inside. */
lm_verdict lm_gap_judge(lm_gap *gap, double low, double high);

/* h at x and, where slope is not NULL, dh/dx (NaN where a term has no score); NaN where no term lives. beside says
 * from which side an edge is looked at: a term lives at its edge when the side does. */
typedef enum { LM_FROM_LEFT = -1, LM_AT = 0, LM_FROM_RIGHT = 1 } lm_side;
double lm_gap_value(const lm_gap *gap, double x, lm_side beside, double *slope);

/* The reading at a part (0 to 1) of the way from low to high in u. */
double lm_gap_between(const lm_gap *gap, double low, double high, double part);

/* The middle of an interval in u, strictly inside unless low and high are neighbours. */
double lm_gap_middle(const lm_gap *gap, double low, double high);

#endif
