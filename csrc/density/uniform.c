/* The uniform law: standard law 1 on 0 <= y <= 1. */
#include <math.h>

#include "../numeric/fault.h"
#include "family.h"

static lm_status make(const double parameters[], lm_term *term, lm_fault *fault)
{
    double width = parameters[1] - parameters[0];
    if (!(width > 0 && isfinite(width)))
        return lm_refuse(fault, LM_DOMAIN, "high", parameters[1], -1, "a number above low, at a finite distance");
    term->shift = parameters[0];
    term->scale = width;
    return LM_OK;
}

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    (void)term;
    for (size_t i = 0; i < n; i++)
        out[i] = y[i] < 0 || y[i] > 1 ? -INFINITY : 0;
}

static double log_cdf(const lm_term *term, double y)
{
    (void)term;
    return y <= 0 ? -INFINITY : y >= 1 ? 0 : log(y);
}

static double log_sf(const lm_term *term, double y)
{
    (void)term;
    return y <= 0 ? 0 : y >= 1 ? -INFINITY : log1p(-y);
}

static double log_mass(const lm_term *term, double low, double high)
{
    (void)term;
    double width = fmin(high, 1) - fmax(low, 0);
    return width > 0 ? log(width) : -INFINITY;
}

static double quantile(const lm_term *term, double log_p, bool upper)
{
    (void)term;
    return upper ? -expm1(log_p) : exp(log_p);
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    (void)term;
    *mean = 0.5;
    *variance = 1.0 / 12;
}

static lm_range support(const lm_term *term)
{
    (void)term;
    return (lm_range){0, 1};
}

static lm_range score_range(const lm_term *term, double low, double high)
{
    (void)term;
    (void)low;
    (void)high;
    return (lm_range){0, 0};
}

static bool ratio(const lm_term *a, const lm_term *b, double low, double high, lm_range *value, lm_range *slope)
{
    (void)low;
    (void)high;
    double constant = a->log_weight - b->log_weight + log(fabs(b->scale / a->scale));
    *value = (lm_range){constant, constant};
    *slope = (lm_range){0, 0};
    return true;
}

const lm_family lm_family_uniform = {
    .name = "uniform",
    .parameter = {{"low", LM_ANY}, {"high", LM_ANY}},
    .make = make,
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .log_mass = log_mass,
    .quantile = quantile,
    .moments = moments,
    .support = support,
    .score_range = score_range,
    .ratio = ratio,
};
