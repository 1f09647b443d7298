/* The standard normal law in the log domain, from GSL's log of the complementary error function (measured here: 2e-16
 * relative from -50 to 1e8). */
#include "normal.h"

#include <gsl/gsl_cdf.h>
#include <gsl/gsl_sf_erf.h>
#include <math.h>

#include "constants.h"
#include "logspace.h"

double lm_normal_log_sf(double z)
{
    if (z > 1e8) /* the leading term: the next is 1 / z^2 of it */
        return -0.5 * z * z - log(z) - LM_LOG_SQRT_2PI;
    if (z < -38) /* 1 to within 1e-315 */
        return -0.0;
    if (z < -1) /* close to log 1: from the other tail */
        return log1p(-0.5 * exp(gsl_sf_log_erfc(-z * LM_SQRT1_2)));
    return gsl_sf_log_erfc(z * LM_SQRT1_2) - LM_LN2;
}

double lm_normal_log_cdf(double z)
{
    return lm_normal_log_sf(-z);
}

/* P = integral of the density over the interval = density at the middle times width times (1 + h^2 (m^2 - 1) / 6 +
 * ...), h the half width: for narrow intervals, where the difference of tails would cancel. */
static double narrow(double a, double b)
{
    double m = 0.5 * (a + b), h = 0.5 * (b - a), m2 = m * m, h2 = h * h;
    double second = (m2 - 1) / 6, fourth = (m2 * m2 - 6 * m2 + 3) / 120;
    return -0.5 * m2 - LM_LOG_SQRT_2PI + log(b - a) + log1p(h2 * (second + h2 * fourth));
}

double lm_normal_log_mass(double a, double b)
{
    if (!(a < b))
        return -INFINITY;
    if (a + b < 0) { /* mirror, so that the interval's bulk is at positive z */
        double mirrored = -a;
        a = -b;
        b = mirrored;
    }
    double h = 0.5 * (b - a), m = 0.5 * (a + b);
    if (h * (1 + m) < 0.003) /* the next term of the series is below (h (1 + m))^6 / 5040 */
        return narrow(a, b);
    if (a <= 0) /* around the peak: the sum of what the two tails leave */
        return log1p(-exp(lm_normal_log_cdf(a)) - exp(lm_normal_log_sf(b)));
    return lm_log_sub(lm_normal_log_sf(a), lm_normal_log_sf(b));
}

double lm_normal_quantile_log(double log_p)
{
    if (log_p == -INFINITY)
        return -INFINITY;
    if (log_p > -0.5)
        return gsl_cdf_ugaussian_Qinv(-expm1(log_p));
    if (log_p > -600)
        return gsl_cdf_ugaussian_Pinv(exp(log_p));
    /* Far out: the leading term, then Newton on the logarithm, whose slope is z (1 + 1 / z^2 + ...). */
    double z = sqrt(-2 * (log_p + LM_LOG_SQRT_2PI));
    z = sqrt(-2 * (log_p + LM_LOG_SQRT_2PI + log(z)));
    for (int i = 0; i < 4; i++)
        z += (lm_normal_log_sf(z) - log_p) / (z + 1 / z);
    return -z;
}
