/* All probability at one reading: mass 1 at y = 0. */
#include <math.h>

#include "family.h"

static lm_status make(const double parameters[], lm_term *term, lm_fault *fault)
{
    (void)fault;
    term->shift = parameters[0];
    return LM_OK;
}

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    (void)term;
    for (size_t i = 0; i < n; i++)
        out[i] = y[i] == 0 ? 0 : -INFINITY;
}

static double log_cdf(const lm_term *term, double y)
{
    (void)term;
    return y < 0 ? -INFINITY : 0;
}

static double log_sf(const lm_term *term, double y)
{
    (void)term;
    return y < 0 ? 0 : -INFINITY;
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    (void)term;
    *mean = 0;
    *variance = 0;
}

static lm_range support(const lm_term *term)
{
    (void)term;
    return (lm_range){0, 0};
}

static lm_range score_range(const lm_term *term, double low, double high)
{
    (void)term;
    (void)low;
    (void)high;
    return (lm_range){0, 0};
}

const lm_family lm_family_point = {
    .name = "point",
    .parameter = {{"value", LM_ANY}},
    .lattice = true,
    .make = make,
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .moments = moments,
    .support = support,
    .score_range = score_range,
};
