/* Sums and differences of probabilities that are held as natural logarithms. None of these can fail. */
#ifndef LM_LOGSPACE_H
#define LM_LOGSPACE_H

#include <math.h>

#include "constants.h"

/* log(1 - exp(x)) for x <= 0: each form where it does not cancel (M. Maechler, Accurately computing log(1 - exp(-|a|)),
 * 2012). */
static inline double lm_log1mexp(double x)
{
    return x > -LM_LN2 ? log(-expm1(x)) : log1p(-exp(x));
}

/* log(exp(a) + exp(b)). */
static inline double lm_log_add(double a, double b)
{
    double larger = a > b ? a : b, smaller = a > b ? b : a;
    if (isnan(a) || isnan(b))
        return a + b;
    if (smaller == -INFINITY || larger == INFINITY)
        return larger;
    return larger + log1p(exp(smaller - larger));
}

/* log(exp(a) - exp(b)) for a >= b; -inf where they are equal. */
static inline double lm_log_sub(double a, double b)
{
    return b == -INFINITY ? a : a <= b ? -INFINITY : a + lm_log1mexp(b - a);
}

/* log(a / b) for a, b > 0: from the difference where they are alike, as rounding of a / b would show; not elsewhere, as
 * (a - b) / b near -1 has lost a. */
static inline double lm_log_quotient(double a, double b)
{
    if (a > 0.5 * b && a < 2 * b)
        return log1p((a - b) / b);
    double quotient = a / b;
    return quotient > 0x1p-1022 && quotient < INFINITY ? log(quotient) : log(a) - log(b);
}

#endif
