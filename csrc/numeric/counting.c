/* Loader's pieces of the probabilities of counts. */
#include "counting.h"

#include <math.h>

#include "constants.h"

double lm_stirling_error(double n)
{
    if (n < 16) /* where the series is not yet good to 1e-17 */
        return lgamma(n + 1) - (n + 0.5) * log(n) + n - LM_LOG_SQRT_2PI;
    double m = n * n;
    return (1.0 / 12 - (1.0 / 360 - (1.0 / 1260 - (1.0 / 1680 - 1.0 / 1188 / m) / m) / m) / m) / n;
}

double lm_deviance(double x, double mean, double difference)
{
    if (fabs(difference) >= 0.1 * (x + mean))
        return x * log(x / mean) - difference;
    double v = difference / (x + mean), sum = difference * v, term = 2 * x * v;
    for (int j = 3;; j += 2) {
        term *= v * v;
        double next = sum + term / j;
        if (next == sum)
            return sum;
        sum = next;
    }
}
