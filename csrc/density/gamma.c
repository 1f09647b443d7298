/* The gamma law: standard law y^(shape - 1) exp(-y) / Gamma(shape), y > 0. Chi-square of dof is shape dof / 2, scale 2.
 */

#include <float.h>
#include <math.h>

#include "../numeric/gamma.h"
#include "family.h"

enum { SHAPE = 0, LOG_NORMALISER = 0 };

/* Below it the plain formula keeps its digits and is fast; above, Loader's form. */
#define LARGE 17

static void fill(lm_term *term, double shape, double scale)
{
    term->scale = scale;
    term->shape[SHAPE] = shape;
    term->constant[LOG_NORMALISER] = lgamma(shape);
}

static lm_status make(const double parameters[], lm_term *term, lm_fault *fault)
{
    (void)fault;
    fill(term, parameters[0], parameters[1]);
    return LM_OK;
}

static lm_status make_chi_square(const double parameters[], lm_term *term, lm_fault *fault)
{
    (void)fault;
    term->family = &lm_family_gamma;
    fill(term, 0.5 * parameters[0], 2);
    return LM_OK;
}

static double log_pdf_at(const lm_term *term, double y)
{
    double shape = term->shape[SHAPE];
    if (y < 0 || isinf(y))
        return -INFINITY;
    if (y == 0)
        return shape > 1 ? -INFINITY : shape == 1 ? 0 : INFINITY;
    if (shape >= LARGE)
        return lm_log_gamma_front(shape - 1, y);
    return (shape == 1 ? 0 : (shape - 1) * log(y)) - y - term->constant[LOG_NORMALISER];
}

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    for (size_t i = 0; i < n; i++)
        out[i] = log_pdf_at(term, y[i]);
}

static double log_cdf(const lm_term *term, double y)
{
    return y <= 0 ? -INFINITY : lm_log_gamma_p(term->shape[SHAPE], y);
}

static double log_sf(const lm_term *term, double y)
{
    return y <= 0 ? 0 : lm_log_gamma_q(term->shape[SHAPE], y);
}

static double quantile(const lm_term *term, double log_p, bool upper)
{
    return lm_gamma_quantile(term->shape[SHAPE], log_p, upper);
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    *mean = term->shape[SHAPE];
    *variance = term->shape[SHAPE];
}

static lm_range support(const lm_term *term)
{
    (void)term;
    return (lm_range){0, INFINITY};
}

static size_t landmarks(const lm_term *term, double out[], size_t capacity)
{
    double mode = term->shape[SHAPE] - 1;
    if (capacity > 0)
        out[0] = mode;
    return mode > 0 ? 1 : 0;
}

static double score(double shape, double y)
{
    return shape == 1 ? -1 : (shape - 1) / y - 1;
}

/* Monotone. */
static lm_range score_range(const lm_term *term, double low, double high)
{
    double shape = term->shape[SHAPE], first = score(shape, low), last = score(shape, high);
    return (lm_range){fmin(first, last), fmax(first, last)};
}

static lm_range tail_range(const lm_term *term, double low, double high)
{
    return (lm_range){term->shape[SHAPE] - 1 - high, term->shape[SHAPE] - 1 - low};
}

/* log(z / z0), where the quotient may overflow. */
static double log_quotient(double z, double z0)
{
    double quotient = z / z0;
    return isinf(quotient) ? log(z) - log(z0) : log(quotient);
}

/* From one edge, z away from it: log f_a - log f_b = r0 + (k_a - k_b) log(z / z0) - (z - z0) (1 / s_a - 1 / s_b), with
 * r0 the ratio at z0 between the two bodies, where both log densities keep their digits. */
static bool ratio(const lm_term *a, const lm_term *b, double low, double high, lm_range *value, lm_range *slope)
{
    if (a->shift != b->shift || (a->scale > 0) != (b->scale > 0))
        return false;
    double sign = a->scale > 0 ? 1 : -1, sa = fabs(a->scale), sb = fabs(b->scale);
    double shapes = a->shape[SHAPE] - b->shape[SHAPE], rates = (sb - sa) / sb / sa;
    double z0 = sqrt(a->shape[SHAPE] * sa) * sqrt(b->shape[SHAPE] * sb);
    double r0 = a->log_weight - b->log_weight - log1p((sa - sb) / sb) + log_pdf_at(a, z0 / sa) - log_pdf_at(b, z0 / sb);
    double z[2] = {sign * ((sign > 0 ? low : high) - a->shift), sign * ((sign > 0 ? high : low) - a->shift)};
    double at[2], steep[2], still = shapes / rates;
    for (int k = 0; k < 2; k++) {
        double away = fmax(z[k], 0);
        double powers = shapes == 0 ? 0 : shapes * log_quotient(away, z0), line = rates == 0 ? 0 : (away - z0) * rates;
        at[k] = r0 + (powers - line);
        steep[k] = sign * ((shapes == 0 ? 0 : shapes / away) - rates);
    }
    *value = (lm_range){fmin(at[0], at[1]), fmax(at[0], at[1])};
    *slope = (lm_range){fmin(steep[0], steep[1]), fmax(steep[0], steep[1])};
    if (still > z[0] && still < z[1]) {
        double there = r0 + (shapes * log_quotient(still, z0) - (still - z0) * rates);
        value->low = fmin(value->low, there);
        value->high = fmax(value->high, there);
    }
    return true;
}

const lm_family lm_family_gamma = {
    .name = "gamma",
    .parameter = {{"shape", LM_POSITIVE}, {"scale", LM_POSITIVE}},
    .make = make,
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .quantile = quantile,
    .moments = moments,
    .support = support,
    .landmarks = landmarks,
    .score_range = score_range,
    .tail_range = tail_range,
    .ratio = ratio,
};

const lm_family lm_family_chi_square = {
    .name = "chi_square",
    .parameter = {{"dof", LM_POSITIVE}},
    .make = make_chi_square,
};
