/* The incomplete gamma function ratios: a series of positive terms below a + 1, Legendre's continued fraction above (M.
 * Abramowitz, I. A. Stegun, Handbook of Mathematical Functions, 1964, 6.5.29 and 6.5.31), both times a front factor in
 * Loader's saddle-point form. Their length grows with the square root of a.
 */
#include "gamma.h"

#include <float.h>
#include <math.h>

#include "constants.h"
#include "counting.h"
#include "logspace.h"

double lm_log_gamma_front(double a, double x)
{
    if (x == 0 || isinf(x))
        return -INFINITY;
    if (a < 16)
        return a * log(x) - x - lgamma(a + 1);
    return -lm_stirling_error(a) - lm_deviance(a, x, a - x) - 0.5 * log(a) - LM_LOG_SQRT_2PI;
}

/* Q / front = a / (x + 1 - a - 1 (1 - a) / (x + 3 - a - 2 (2 - a) / ...)), by Lentz's method. */
static double fraction(double a, double x)
{
    double b = x + 1 - a, c = 1 / DBL_MIN, d = 1 / b, h = d;
    for (double k = 1; k < 1e7; k++) {
        double over = k * (a - k);
        b += 2;
        d = over * d + b;
        c = b + over / c;
        d = 1 / (d == 0 ? DBL_MIN : d);
        c = c == 0 ? DBL_MIN : c;
        double change = c * d;
        h *= change;
        if (fabs(change - 1) <= DBL_EPSILON / 2)
            break;
    }
    return a * h;
}

static double series(double a, double x)
{
    double term = 1, sum = 1;
    for (double k = 1; term > sum * (DBL_EPSILON / 8); k++)
        sum += term *= x / (a + k);
    return sum;
}

double lm_log_gamma_p(double a, double x)
{
    if (x < a + 1)
        return fmin(lm_log_gamma_front(a, x) + log(series(a, x)), 0);
    return lm_log1mexp(lm_log_gamma_q(a, x));
}

double lm_log_gamma_q(double a, double x)
{
    if (isinf(x))
        return -INFINITY;
    if (x < a + 1)
        return lm_log1mexp(lm_log_gamma_p(a, x));
    return lm_log_gamma_front(a, x) + log(fraction(a, x));
}

double lm_gamma_quantile(double a, double log_p, int upper)
{
    if (log_p == 0 || log_p == -INFINITY)
        return (log_p == 0) == (upper != 0) ? 0 : INFINITY;
    if (log_p > -LM_LN2) /* the smaller tail is the better conditioned one */
        return lm_gamma_quantile(a, lm_log1mexp(log_p), !upper);
    /* Newton on the logarithm of the tail in s = log x, kept inside a bracket. Below, P is under x^a / Gamma(a + 1),
     * which gives a start where that is sharp; above, Q falls about like exp(-x). */
    double low = -745, high = 709.7, s = upper ? log(a - log_p) : fmin((log_p + lgamma(a + 1)) / a, log(a));
    if (s <= low)
        return 0;
    for (int i = 0; i < 300; i++) {
        double x = exp(s), value = upper ? lm_log_gamma_q(a, x) : lm_log_gamma_p(a, x), miss = value - log_p;
        if ((miss < 0) == !upper)
            low = s;
        else
            high = s;
        double slope = exp(fmin(log(a) + lm_log_gamma_front(a, x) - value, 700)); /* x times density over tail */
        double next = upper ? s + miss / slope : s - miss / slope;
        if (!(next > low && next < high))
            next = 0.5 * (low + high);
        double step = fabs(next - s);
        s = next;
        if (step <= 0.5 * DBL_EPSILON * fmax(1, fabs(s)) || high - low <= DBL_EPSILON * fabs(low))
            break;
    }
    /* log x rounds; one step in x itself takes that out. */
    double x = exp(s), value = upper ? lm_log_gamma_q(a, x) : lm_log_gamma_p(a, x);
    double relative = (value - log_p) / exp(fmin(log(a) + lm_log_gamma_front(a, x) - value, 700));
    double last = upper ? x + x * relative : x - x * relative;
    return isfinite(last) && last >= 0 ? last : x;
}
