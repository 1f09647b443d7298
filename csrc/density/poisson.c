/* The Poisson law: masses mean^y exp(-mean) / y! on y = 0, 1, 2, ... */
#include <float.h>
#include <math.h>

#include <gsl/gsl_sf_psi.h>

#include "../numeric/constants.h"
#include "../numeric/counting.h"
#include "../numeric/logspace.h"
#include "family.h"

static lm_status make(const double parameters[], lm_term *term, lm_fault *fault)
{
    (void)fault;
    term->shape[0] = parameters[0];
    return LM_OK;
}

static double log_mass_at(double mean, double y)
{
    if (y < 0)
        return -INFINITY;
    if (y < 16)
        return y * log(mean) - mean - lgamma(y + 1);
    if (isinf(y))
        return -INFINITY;
    return -lm_stirling_error(y) - lm_deviance(y, mean, y - mean) - 0.5 * log(y) - LM_LOG_SQRT_2PI;
}

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    for (size_t i = 0; i < n; i++)
        out[i] = log_mass_at(term->shape[0], y[i]);
}

/* log P(Y <= k) for whole k < mean, from k downwards: each mass is k / mean times the one above it. */
static double log_downwards(double mean, double k)
{
    double term = 1, sum = 1;
    for (; k > 0 && term > sum * DBL_EPSILON / 16; k--)
        sum += term *= k / mean;
    return log(sum);
}

/* log of P(Y >= k) / P(Y = k) for whole k > mean, upwards. */
static double log_upwards(double mean, double k)
{
    double term = 1, sum = 1;
    for (k++; term > sum * DBL_EPSILON / 16; k++)
        sum += term *= mean / k;
    return log(sum);
}

static double log_cdf(const lm_term *term, double y)
{
    double mean = term->shape[0], k = floor(y);
    if (k < 0)
        return -INFINITY;
    if (k < mean)
        return log_mass_at(mean, k) + log_downwards(mean, k);
    return isinf(k) ? 0 : lm_log1mexp(log_mass_at(mean, k + 1) + log_upwards(mean, k + 1));
}

static double log_sf(const lm_term *term, double y)
{
    double mean = term->shape[0], k = floor(y);
    if (k < 0)
        return 0;
    if (k < mean)
        return lm_log1mexp(log_cdf(term, k));
    return isinf(k) ? -INFINITY : log_mass_at(mean, k + 1) + log_upwards(mean, k + 1);
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    *mean = term->shape[0];
    *variance = term->shape[0];
}

static lm_range support(const lm_term *term)
{
    (void)term;
    return (lm_range){0, INFINITY};
}

static size_t landmarks(const lm_term *term, double out[], size_t capacity)
{
    if (capacity > 0)
        out[0] = floor(term->shape[0]);
    return term->shape[0] >= 1 ? 1 : 0;
}

/* Of the continuation: log mean - psi(y + 1), falling. */
static double score(double mean, double y)
{
    gsl_sf_result psi;
    return gsl_sf_psi_e(y + 1, &psi) == 0 ? log(mean) - psi.val : log(mean / (y + 0.5));
}

static lm_range score_range(const lm_term *term, double low, double high)
{
    return (lm_range){score(term->shape[0], high), score(term->shape[0], low)};
}

/* On one lattice log f_a - log f_b is a line: y log(mean_a / mean_b) - (mean_a - mean_b). */
static bool ratio(const lm_term *a, const lm_term *b, double low, double high, lm_range *value, lm_range *slope)
{
    if (a->shift != b->shift || a->scale != b->scale)
        return false;
    double apart = a->shape[0] - b->shape[0], constant = a->log_weight - b->log_weight - apart;
    double per_count = fabs(apart) < 0.5 * b->shape[0] ? log1p(apart / b->shape[0]) : log(a->shape[0] / b->shape[0]);
    double first = constant + per_count * ((low - a->shift) / a->scale);
    double last = constant + per_count * ((high - a->shift) / a->scale);
    *value = (lm_range){fmin(first, last), fmax(first, last)};
    *slope = (lm_range){per_count / a->scale, per_count / a->scale};
    return true;
}

const lm_family lm_family_poisson = {
    .name = "poisson",
    .parameter = {{"mean", LM_POSITIVE}},
    .lattice = true,
    .make = make,
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .moments = moments,
    .support = support,
    .landmarks = landmarks,
    .score_range = score_range,
    .ratio = ratio,
};
