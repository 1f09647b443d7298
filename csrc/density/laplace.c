/* The Laplace law: standard law exp(-|y|) / 2. */
#include <math.h>

#include "../numeric/constants.h"
#include "../numeric/logspace.h"
#include "family.h"

static lm_status make(const double parameters[], lm_term *term, lm_fault *fault)
{
    (void)fault;
    term->shift = parameters[0];
    term->scale = parameters[1];
    return LM_OK;
}

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    (void)term;
    for (size_t i = 0; i < n; i++)
        out[i] = -fabs(y[i]) - LM_LN2;
}

static double log_cdf(const lm_term *term, double y)
{
    (void)term;
    return y <= 0 ? y - LM_LN2 : log1p(-0.5 * exp(-y));
}

static double log_sf(const lm_term *term, double y)
{
    return log_cdf(term, -y);
}

static double quantile(const lm_term *term, double log_p, bool upper)
{
    (void)term;
    double below = log_p <= -LM_LN2 ? log_p + LM_LN2 : -(lm_log1mexp(log_p) + LM_LN2);
    return upper ? -below : below;
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    (void)term;
    *mean = 0;
    *variance = 2;
}

static lm_range support(const lm_term *term)
{
    (void)term;
    return (lm_range){-INFINITY, INFINITY};
}

static size_t landmarks(const lm_term *term, double out[], size_t capacity)
{
    (void)term;
    if (capacity > 0)
        out[0] = 0;
    return 1;
}

static lm_range score_range(const lm_term *term, double low, double high)
{
    (void)term;
    (void)high;
    double score = low >= 0 ? -1 : 1;
    return (lm_range){score, score};
}

/* Between kinks log f_a - log f_b is a line. On one side of both kinks, with t = x - m_b and d = m_a - m_b, it is
 * side * (t (s_a - s_b) / (s_a s_b) + d / s_a), where nothing cancels that the parameters do not cancel. */
static double ratio_at(const lm_term *a, const lm_term *b, double x, double side_a, double side_b)
{
    double sa = fabs(a->scale), sb = fabs(b->scale), t = x - b->shift, constant = lm_log_quotient(sb, sa);
    if (side_a != side_b)
        return constant - side_a * ((x - a->shift) / sa) + side_b * (t / sb);
    double tilt = sa == sb ? 0 : t / sa * ((sa - sb) / sb);
    return constant + side_a * (tilt + (a->shift - b->shift) / sa);
}

static bool ratio(const lm_term *a, const lm_term *b, double low, double high, lm_range *value, lm_range *slope)
{
    if ((low < a->shift && high > a->shift) || (low < b->shift && high > b->shift))
        return false; /* a kink inside */
    double side_a = low >= a->shift ? 1 : -1, side_b = low >= b->shift ? 1 : -1;
    double sa = fabs(a->scale), sb = fabs(b->scale), weight = a->log_weight - b->log_weight;
    double first = weight + ratio_at(a, b, low, side_a, side_b), last = weight + ratio_at(a, b, high, side_a, side_b);
    double tilt = side_a == side_b ? side_a * ((sa - sb) / sb / sa) : side_b / sb - side_a / sa;
    *value = (lm_range){fmin(first, last), fmax(first, last)};
    *slope = (lm_range){tilt, tilt};
    return true;
}

const lm_family lm_family_laplace = {
    .name = "laplace",
    .parameter = {{"loc", LM_ANY}, {"scale", LM_POSITIVE}},
    .make = make,
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .quantile = quantile,
    .moments = moments,
    .support = support,
    .landmarks = landmarks,
    .score_range = score_range,
    .ratio = ratio,
};
