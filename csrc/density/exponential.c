/* The exponential law: standard law exp(-y), y >= 0. */
#include <math.h>

#include "../numeric/logspace.h"
#include "family.h"

static lm_status make(const double parameters[], lm_term *term, lm_fault *fault)
{
    (void)fault;
    term->scale = parameters[0];
    term->shift = parameters[1];
    return LM_OK;
}

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    (void)term;
    for (size_t i = 0; i < n; i++)
        out[i] = y[i] < 0 ? -INFINITY : -y[i];
}

static double log_cdf(const lm_term *term, double y)
{
    (void)term;
    return y <= 0 ? -INFINITY : lm_log1mexp(-y);
}

static double log_sf(const lm_term *term, double y)
{
    (void)term;
    return y <= 0 ? 0 : -y;
}

static double log_mass(const lm_term *term, double low, double high)
{
    (void)term;
    low = fmax(low, 0);
    return high <= low ? -INFINITY : -low + lm_log1mexp(low - high);
}

static double quantile(const lm_term *term, double log_p, bool upper)
{
    (void)term;
    return upper ? -log_p : -lm_log1mexp(log_p);
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    (void)term;
    *mean = 1;
    *variance = 1;
}

static lm_range support(const lm_term *term)
{
    (void)term;
    return (lm_range){0, INFINITY};
}

static lm_range score_range(const lm_term *term, double low, double high)
{
    (void)term;
    (void)low;
    (void)high;
    return (lm_range){-1, -1};
}

/* A line; with t = x - l_b it is t (s_a - s_b) / (s_a s_b) + (l_a - l_b) / s_a, scales with their signs. */
static double ratio_at(const lm_term *a, const lm_term *b, double x)
{
    double sa = a->scale, sb = b->scale;
    double tilt = sa == sb ? 0 : (x - b->shift) / sa * ((sa - sb) / sb);
    return a->log_weight - b->log_weight + log(fabs(sb / sa)) + (tilt + (a->shift - b->shift) / sa);
}

static bool ratio(const lm_term *a, const lm_term *b, double low, double high, lm_range *value, lm_range *slope)
{
    double first = ratio_at(a, b, low), last = ratio_at(a, b, high);
    double tilt = (a->scale - b->scale) / b->scale / a->scale;
    *value = (lm_range){fmin(first, last), fmax(first, last)};
    *slope = (lm_range){tilt, tilt};
    return true;
}

const lm_family lm_family_exponential = {
    .name = "exponential",
    .parameter = {{"scale", LM_POSITIVE}, {"low", LM_ANY}},
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
