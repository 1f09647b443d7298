/* Student's t law: its normaliser, its tails and their inverse, in the log domain.
 *
 * Near the middle P(0 < T <= t) is t f(t) F(1, (dof + 1) / 2; 3/2; t^2 / (dof + t^2)), a series of positive terms; in
 * the tail P(T > t) is half the incomplete beta function I_x(dof / 2, 1 / 2) at x = dof / (dof + t^2), by a continued
 * fraction of positive terms (M. Abramowitz, I. A. Stegun, Handbook of Mathematical Functions, 1964, 26.7.1, 26.5 and
 * 15.3.4).
 */
#include "student.h"

#include <float.h>
#include <math.h>

#include "constants.h"
#include "logspace.h"

double lm_student_log_peak(double dof)
{
    double a = 0.5 * dof, i = 1 / a, s = i * i;
    if (a < 15)
        return lgamma(a + 0.5) - lgamma(a) - 0.5 * log(LM_PI * dof);
    /* log Gamma(a + 1/2) - log Gamma(a) = log(a) / 2 - 1 / (8 a) + ..., from Stirling's series; next term 4e-17. */
    double series =
        -1.0 / 8 + s * (1.0 / 192 - s * (1.0 / 640 - s * (17.0 / 14336 - s * (31.0 / 18432 - s * 691.0 / 180224))));
    return i * series - LM_LOG_SQRT_2PI;
}

double lm_student_log_spread(double dof, double t)
{
    double square = t * t / dof;
    return isinf(square) ? 2 * log(fabs(t)) - log(dof) : log1p(square);
}

static double log_density(double dof, double log_peak, double t)
{
    return log_peak - 0.5 * (dof + 1) * lm_student_log_spread(dof, t);
}

/* P(0 < T <= t) for 0 <= t, t^2 <= 3. */
static double from_middle(double dof, double log_peak, double t)
{
    double z = t * t / (dof + t * t), a = 0.5 * (dof + 1), term = 1, sum = 1;
    for (int k = 0; term > sum * (DBL_EPSILON / 8); k++)
        sum += term *= z * ((a + k) / (1.5 + k));
    return t * exp(log_density(dof, log_peak, t)) * sum;
}

/* F(1/2, 1; a + 1; -w) by Gauss's continued fraction 1 / (1 + w k1 / (1 + w k2 / (1 + ...))), all k > 0
 * (Handbook, 15.4; H. S. Wall, Analytic Theory of Continued Fractions, 1948, ch. XVIII), forward by Lentz's method. */
static double fraction(double a, double w)
{
    double c = 1, d = 0, h = 1;
    for (double k = 0; k < 1e6; k++) {
        double odd = w * (0.5 + k) * (a + k) / ((a + 2 * k) * (a + 2 * k + 1));
        double even = w * (k + 1) * (a + k + 0.5) / ((a + 2 * k + 1) * (a + 2 * k + 2));
        d = 1 / (1 + odd * d);
        c = 1 + odd / c;
        h *= c * d;
        d = 1 / (1 + even * d);
        c = 1 + even / c;
        double change = c * d;
        h *= change;
        if (fabs(change - 1) <= DBL_EPSILON / 2)
            break;
    }
    return 1 / h;
}

double lm_student_log_sf(double dof, double log_peak, double t)
{
    if (t < 0)
        return log1p(-exp(lm_student_log_sf(dof, log_peak, -t)));
    if (isinf(t))
        return -INFINITY;
    if (t * t <= 3)
        return log(0.5 - from_middle(dof, log_peak, t));
    /* Half of x^a (1 - x)^b / (a B(a, b)) F(a + b, 1; a + 1; x), with Pfaff's transformation of F to -x / (1 - x) = -w,
     * so that no 1 - x is formed; a B(a, 1/2) = sqrt(dof) exp(-log_peak) / 2. */
    double w = dof / t / t;
    return log_peak - 0.5 * log(dof) - 0.5 * dof * lm_student_log_spread(dof, t) + 0.5 * log1p(w) +
           log(fraction(0.5 * dof, w));
}

/* t > 0 with P(0 < T <= t) = area, for areas up to a quarter: Newton on a concave function, from below. */
static double middle_quantile(double dof, double log_peak, double area)
{
    double t = area / exp(log_peak);
    for (int i = 0; i < 60; i++) {
        double step = (area - from_middle(dof, log_peak, t)) / exp(log_density(dof, log_peak, t));
        t += step;
        if (fabs(step) <= DBL_EPSILON * t)
            break;
    }
    return t;
}

double lm_student_isf(double dof, double log_peak, double log_p)
{
    if (log_p == 0 || log_p == -INFINITY)
        return log_p == 0 ? -INFINITY : INFINITY;
    if (log_p > -LM_LN2)
        return -lm_student_isf(dof, log_peak, lm_log1mexp(log_p));
    double area = -0.5 * expm1(log_p + LM_LN2); /* 1/2 - p */
    if (area <= 0.25)
        return middle_quantile(dof, log_peak, area);
    /* Newton on the logarithm of the tail in the logarithm of t, in which it is concave: no step from the left of the
     * root goes past it. Start where the power of the far tail, which lies above the law, reaches p. */
    double s = (log_peak - log_p + 0.5 * (dof - 1) * log(dof)) / dof, low = -40, high = 709.7;
    s = fmin(fmax(s, low), high);
    for (int i = 0; i < 200; i++) {
        double t = exp(s), log_sf = lm_student_log_sf(dof, log_peak, t);
        if (log_sf >= log_p)
            low = s;
        else
            high = s;
        double slope = -exp(fmin(log_density(dof, log_peak, t) + s - log_sf, 700));
        double next = s - (log_sf - log_p) / slope;
        if (!(next > low && next < high))
            next = 0.5 * (low + high);
        if (fabs(next - s) <= 0.5 * DBL_EPSILON * fmax(1, fabs(s)) || high - low <= DBL_EPSILON * fabs(low)) {
            s = next;
            break;
        }
        s = next;
    }
    /* The logarithm of t rounds; one step in t itself takes that out. */
    double t = exp(s), log_sf = lm_student_log_sf(dof, log_peak, t);
    double last = t + (log_sf - log_p) * exp(log_sf - log_density(dof, log_peak, t));
    return s >= 709.7 ? INFINITY : isfinite(last) ? last : t;
}
