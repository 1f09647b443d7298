/* Integrals of functions that are held as natural logarithms, however small: adaptive Gauss-Kronrod on panels. */
#ifndef LM_QUADRATURE_H
#define LM_QUADRATURE_H

#include "../limen.h"

/* Logarithms of a function >= 0 at n places; false: it could not be had. */
typedef bool (*lm_log_function)(const void *context, const double x[], double out[], size_t n);

/* A stretch over which 15 points are enough. */
typedef struct {
    double low, high;
    double log_mass;
} lm_log_panel;

typedef struct {
    lm_log_panel *panel;
    size_t count, capacity;
    size_t tried, most; /* rules applied so far, and how many there may be before halving ends */
    double log_sum;     /* of all the panels added */
    bool sum_only;      /* the panels themselves are not kept, so that no memory is asked for */
    double log_error;   /* of panels that were as narrow as doubles allow, or came when too many had been tried */
} lm_log_panels;

#define LM_NO_PANELS ((lm_log_panels){.most = 40000, .log_sum = -INFINITY, .log_error = -INFINITY})

/* Log of the integral over [low, high] by 15 points, and how far 7 of them are off, as a part of it. False where f
 * failed. */
LM_MUST_USE bool lm_log_rule(lm_log_function f, const void *context, double low, double high, double *log_mass,
                             double *error);

/* Adds the panels of [low, high], ascending, each to rounding; what is below log_floor may be rougher. LM_CALLBACK
 * where f failed; the panels are the caller's to free on failure too. */
LM_MUST_USE lm_status lm_log_integrate(lm_log_function f, const void *context, double low, double high,
                                       double log_floor, lm_log_panels *panels);

void lm_log_panels_free(lm_log_panels *panels);

#endif
