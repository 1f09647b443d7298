/* The Gaussian: standard law exp(-y^2/2) / sqrt(2 pi). */
#include <math.h>

#include "../numeric/constants.h"
#include "../numeric/logspace.h"
#include "../numeric/normal.h"
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
        out[i] = -0.5 * y[i] * y[i] - LM_LOG_SQRT_2PI;
}

static double log_cdf(const lm_term *term, double y)
{
    (void)term;
    return lm_normal_log_cdf(y);
}

static double log_sf(const lm_term *term, double y)
{
    (void)term;
    return lm_normal_log_sf(y);
}

static double log_mass(const lm_term *term, double low, double high)
{
    (void)term;
    return lm_normal_log_mass(low, high);
}

static double quantile(const lm_term *term, double log_p, bool upper)
{
    (void)term;
    return upper ? -lm_normal_quantile_log(log_p) : lm_normal_quantile_log(log_p);
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    (void)term;
    *mean = 0;
    *variance = 1;
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
    return (lm_range){-high, -low};
}

/* log f_a - log f_b is a quadratic, its slope a line. In t = x - m_b, with d = m_a - m_b:
 *   y_b - y_a = (t (s_a - s_b) + s_b d) / (s_a s_b),   y_b + y_a likewise with the other signs,
 *   slope = (t (s_a - s_b)(s_a + s_b) + s_b^2 d) / (s_a s_b)^2,
 * products of differences of the parameters, so nothing cancels that the parameters do not cancel. Where the scales
 * are unlike, y_a and y_b themselves are better: t is large against x - m_a when b is wide and far. */
typedef struct {
    double constant, near, far, lead, tilt, sum, apart, product, mean_a, mean_b, sd_a, sd_b;
    bool unlike;
} quadratic;

static quadratic prepare(const lm_term *a, const lm_term *b)
{
    double sa = fabs(a->scale), sb = fabs(b->scale), apart = a->shift - b->shift;
    return (quadratic){
        .constant = a->log_weight - b->log_weight - lm_log_quotient(sa, sb),
        .near = sa - sb,
        .sum = sa + sb,
        .far = sb * apart,
        .lead = (sa - sb) * (sa + sb) / (sa * sb) / (sa * sb),
        .tilt = apart / sa / sa,
        .apart = apart,
        .product = sa * sb,
        .mean_a = a->shift,
        .mean_b = b->shift,
        .sd_a = sa,
        .sd_b = sb,
        .unlike = sa > 2 * sb || sb > 2 * sa,
    };
}

static double ratio_at(const quadratic *q, double x)
{
    double t = x - q->mean_b;
    if (q->unlike) {
        double ya = (x - q->mean_a) / q->sd_a, yb = t / q->sd_b, rise = 0.5 * (yb - ya) * (yb + ya);
        if (isfinite(rise))
            return q->constant + rise;
    }
    double less = (t * q->near + q->far) / q->product, more = (t * q->sum - q->far) / q->product;
    double rise = 0.5 * less * more;
    return less == 0 ? q->constant : q->constant + rise;
}

static double slope_at(const quadratic *q, double x)
{
    if (q->unlike) {
        double slope = (x - q->mean_b) / q->sd_b / q->sd_b - (x - q->mean_a) / q->sd_a / q->sd_a;
        if (isfinite(slope))
            return slope;
    }
    return q->lead == 0 ? q->tilt : (x - q->mean_b) * q->lead + q->tilt;
}

static bool ratio(const lm_term *a, const lm_term *b, double low, double high, lm_range *value, lm_range *slope)
{
    quadratic q = prepare(a, b);
    double at_low = ratio_at(&q, low), s_low = slope_at(&q, low);
    if (low == high) {
        *value = (lm_range){at_low, at_low};
        *slope = (lm_range){s_low, s_low};
        return true;
    }
    double at_high = ratio_at(&q, high), s_high = slope_at(&q, high);
    *value = (lm_range){fmin(at_low, at_high), fmax(at_low, at_high)};
    *slope = (lm_range){fmin(s_low, s_high), fmax(s_low, s_high)};
    if (slope->low < 0 && slope->high > 0) { /* the vertex is inside; its height is free of x */
        double vertex = q.constant - 0.5 * (q.apart / q.near) * (q.apart / q.sum);
        value->low = fmin(value->low, vertex);
        value->high = fmax(value->high, vertex);
    }
    return true;
}

const lm_family lm_family_gaussian = {
    .name = "gaussian",
    .parameter = {{"mean", LM_ANY}, {"sd", LM_POSITIVE}},
    .make = make,
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .log_mass = log_mass,
    .quantile = quantile,
    .moments = moments,
    .support = support,
    .landmarks = landmarks,
    .score_range = score_range,
    .ratio = ratio,
};
