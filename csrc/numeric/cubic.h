/* Cubic polynomials on an interval: value, and the exact range from the ends and the stationary points. */
#ifndef LM_CUBIC_H
#define LM_CUBIC_H

#include <math.h>

#include "../limen.h"

/* c[0] + c[1] t + c[2] t^2 + c[3] t^3 */
static inline double lm_cubic(const double c[4], double t)
{
    return c[0] + t * (c[1] + t * (c[2] + t * c[3]));
}

/* Real roots of a t^2 + b t + c in any order, without cancellation; returns how many (a double root counts twice). */
static inline int lm_quadratic_roots(double a, double b, double c, double roots[2])
{
    if (a == 0) {
        roots[0] = -c / b;
        return b != 0;
    }
    double discriminant = b * b - 4 * a * c;
    if (!(discriminant >= 0))
        return 0;
    double q = -0.5 * (b + copysign(sqrt(discriminant), b));
    roots[0] = q / a;
    roots[1] = q != 0 ? c / q : 0;
    return 2;
}

/* Range over low <= t <= high. */
static inline lm_range lm_cubic_range(const double c[4], double low, double high)
{
    double a = lm_cubic(c, low), b = lm_cubic(c, high), roots[2];
    lm_range range = {fmin(a, b), fmax(a, b)};
    int count = lm_quadratic_roots(3 * c[3], 2 * c[2], c[1], roots);
    for (int i = 0; i < count; i++)
        if (roots[i] > low && roots[i] < high) {
            double value = lm_cubic(c, roots[i]);
            range.low = fmin(range.low, value);
            range.high = fmax(range.high, value);
        }
    return range;
}

#endif
