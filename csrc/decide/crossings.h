/* All readings at which a gap changes sign, over all finite doubles. */
#ifndef LM_CROSSINGS_H
#define LM_CROSSINGS_H

#include "gap.h"

typedef struct {
    size_t count;
    size_t capacity;
    double *at;
} lm_points;

LM_MUST_USE lm_status lm_points_add(lm_points *points, double x);
/* Ascending, each once. */
void lm_points_sort(lm_points *points);
void lm_points_free(lm_points *points);

/* Adds the first double from which on the sign is another to `levels`, for every change of sign inside a stretch where
 * the same terms live; what happens at support edges is the caller's. breaks: support edges and kinks, sorted. */
LM_MUST_USE lm_status lm_gap_crossings(lm_gap *gap, const lm_points *breaks, lm_points *levels, lm_search *search);

/* Two Gaussian terms of opposite sign: the roots of a quadratic, in closed form without cancellation, ascending. False
 * where the two lie only some doubles apart: then the search must look at each. */
bool lm_gaussian_pair(const lm_gap *gap, double levels[2], size_t *count);

#endif
