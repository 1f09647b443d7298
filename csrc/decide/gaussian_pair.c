/* Two weighted Gaussians meet at the roots of a quadratic, solved without cancellation.
 *
 * With t = x - m1, d = m2 - m1 and L = log of (weight1 / sd1) over (weight2 / sd2), the log ratio vanishes where
 *   t^2 (s1 - s2)(s1 + s2) - 2 t d s1^2 + s1^2 (d^2 + 2 L s2^2) = 0,
 * whose discriminant is s1^2 s2^2 (d^2 - 2 L (s1 - s2)(s1 + s2)): with equal weights a sum of two numbers >= 0. The
 * root of larger modulus comes from the sum in the numerator, the other from the product of the roots.
 */
#include <float.h>
#include <math.h>

#include "../numeric/logspace.h"
#include "crossings.h"

/* One Newton step on the gap itself takes out what rounding of the coefficients left. */
static double polish(const lm_gap *gap, double x)
{
    double slope, h = lm_gap_value(gap, x, LM_AT, &slope), next = x - h / slope;
    return isfinite(next) && fabs(next - x) < 1e-3 * (gap->scale + fabs(x)) ? next : x;
}

bool lm_gaussian_pair(const lm_gap *gap, double levels[2], size_t *count)
{
    *count = 0;
    const lm_term *one = &gap->term[0].term, *two = &gap->term[1].term;
    double s1 = fabs(one->scale), s2 = fabs(two->scale), d = two->shift - one->shift;
    double unlike = (s1 - s2) / s2 * ((s1 + s2) / s2); /* all lengths in units of s2 */
    double log_ratio = one->log_weight - two->log_weight - lm_log_quotient(s1, s2);
    double apart = d / s2, r = s1 / s2;
    double discriminant = apart * apart - 2 * log_ratio * unlike;
    if (unlike == 0) {
        if (apart == 0)
            return true;
        double x = one->shift + s2 * (0.5 * apart + log_ratio * r * r / apart);
        if (isfinite(x))
            levels[(*count)++] = polish(gap, x);
        return true;
    }
    if (!(discriminant > 0))
        return true;
    double root = r * sqrt(discriminant), b = apart * r * r;
    double q = b + copysign(root, b), c = r * r * (apart * apart + 2 * log_ratio);
    double roots[2] = {one->shift + s2 * (q / unlike), one->shift + s2 * (c / q)};
    if (roots[0] > roots[1]) {
        double swap = roots[0];
        roots[0] = roots[1];
        roots[1] = swap;
    }
    /* Two roots with few doubles between them: the search looks at each of those. */
    if (roots[1] - roots[0] <= 64 * DBL_EPSILON * fmax(fabs(roots[0]), fabs(roots[1])))
        return false;
    for (int i = 0; i < 2; i++)
        if (isfinite(roots[i]))
            levels[(*count)++] = polish(gap, roots[i]);
    return true;
}
