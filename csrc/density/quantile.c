/* The reading at a given tail probability, for any density, from either tail. */
#include <float.h>
#include <math.h>
#include <string.h>

#include "../numeric/constants.h"
#include "../numeric/fault.h"
#include "../numeric/logspace.h"
#include "family.h"

/* Doubles in ascending order as integers, so that halving reaches any double from any other in 64 steps. */
static int64_t order_of(double x)
{
    int64_t bits;
    memcpy(&bits, &x, sizeof bits);
    return bits < 0 ? INT64_MIN - bits : bits;
}

static double double_of(int64_t order)
{
    int64_t bits = order < 0 ? INT64_MIN - order : order;
    double x;
    memcpy(&x, &bits, sizeof x);
    return x;
}

static double halfway(double low, double high)
{
    int64_t a = order_of(low), b = order_of(high);
    return double_of((a & b) + ((a ^ b) >> 1)); /* their mean, rounded down, without overflow */
}

typedef struct {
    const lm_density *density;
    double log_p;
    bool upper;
} target;

/* >= 0 from the wanted reading on: the logarithm of the tail against the wanted one. */
static lm_status excess(const target *t, double x, double *out)
{
    double value;
    LM_TRY((t->upper ? lm_density_log_sf : lm_density_log_cdf)(t->density, &x, &value, 1));
    *out = t->upper ? t->log_p - value : value - t->log_p;
    return LM_OK;
}

/* The smallest double in (low, high] with excess >= 0, which high has and low has not. Secant steps on the logarithm of
 * the tail, halving of the doubles between where they stall: never more than twice the halvings. */
static lm_status smallest(const target *t, double low, double high, double *out)
{
    double below = -INFINITY, above = INFINITY;
    for (int step = 0; nextafter(low, high) < high; step++) {
        double x = halfway(low, high);
        if (step % 2 == 1 && isfinite(below) && isfinite(above)) {
            double secant = high - (high - low) * (above / (above - below));
            /* One step past the secant point, towards the far end, closes the bracket from both sides. */
            if (secant > low && secant < high)
                x = secant;
        }
        double value;
        LM_TRY(excess(t, x, &value));
        if (value >= 0) {
            high = x;
            above = value;
        } else {
            low = x;
            below = value;
        }
    }
    *out = high;
    return LM_OK;
}

/* On a lattice the rounded reading of the integer itself. */
static double settled(const lm_density *density, double x)
{
    for (size_t i = 0; i < density->count; i++) {
        const lm_term *term = &density->term[i];
        double y = lm_term_standard(term, x);
        if (term->family->lattice && y == floor(y))
            return term->shift + term->scale * y;
    }
    return x;
}

static double of_term(const lm_term *term, double log_p, bool upper)
{
    double y = term->family->quantile(term, log_p, term->scale > 0 ? upper : !upper);
    return term->shift + term->scale * y;
}

lm_status lm_density_quantile(const lm_density *density, double log_p, bool upper, double *out)
{
    lm_range support = lm_density_support(density), bracket = support;
    if (!(log_p <= 0))
        return LM_DOMAIN;
    if (log_p == -INFINITY || log_p == 0) {
        *out = (log_p == 0) == upper ? support.low : support.high;
        return LM_OK;
    }
    bool closed = true;
    for (size_t i = 0; i < density->count; i++)
        closed &= density->term[i].family->quantile != NULL && !density->term[i].family->lattice;
    if (closed) { /* a mixture's quantile lies between those of its terms */
        bracket = (lm_range){INFINITY, -INFINITY};
        for (size_t i = 0; i < density->count; i++) {
            double x = of_term(&density->term[i], log_p, upper);
            if (isnan(x))
                return LM_CALLBACK;
            bracket.low = fmin(bracket.low, x);
            bracket.high = fmax(bracket.high, x);
        }
        if (density->count == 1) {
            *out = bracket.low;
            return LM_OK;
        }
    }
    target t = {density, log_p, upper};
    if (log_p > -LM_LN2) /* the smaller tail is the better conditioned one */
        t = (target){density, lm_log1mexp(log_p), !upper};
    double low = nextafter(fmax(bracket.low, -DBL_MAX), -INFINITY), high = fmin(bracket.high, DBL_MAX), at;
    if (closed) { /* the terms' quantiles are rounded: a few units of slack */
        low -= 4 * DBL_EPSILON * fabs(low);
        high += 4 * DBL_EPSILON * fabs(high);
    }
    LM_TRY(smallest(&t, low, high, &at));
    *out = settled(density, at);
    return LM_OK;
}
