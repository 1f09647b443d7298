/* Exact bounds of a rate from counts: the binomial tails solved for the rate (C. J. Clopper and E. S. Pearson,
 * Biometrika 26, 1934, 404-413).
 *
 * A tail is its first and largest term times the sum of the ratios of those that follow. The term is computed as C.
 * Loader does (Fast and accurate computation of binomial probabilities, 2000), from the deviance, so that nothing
 * cancels for large counts.
 */
#include <float.h>
#include <math.h>

#include "../limen.h"
#include "../numeric/constants.h"
#include "../numeric/counting.h"
#include "../numeric/fault.h"

/* log P(K = k) of n trials with rate p; 0 < k < n. */
static double log_term(double k, double n, double p)
{
    return lm_stirling_error(n) - lm_stirling_error(k) - lm_stirling_error(n - k) - lm_deviance(k, n * p, k - n * p) -
           lm_deviance(n - k, n - n * p, n * p - k) + 0.5 * log(n / (k * (n - k))) - LM_LOG_SQRT_2PI;
}

/* log P(K >= k) where k > n p, or log P(K <= k) where k < n p; 0 < k < n. */
static double log_tail(double k, double n, double p, bool above)
{
    double odds = p / (1 - p), term = 1, sum = 1;
    for (double i = 0; term > sum * DBL_EPSILON / 16; i++) {
        term *= above ? (n - k - i) / (k + i + 1) * odds : (k - i) / (n - k + i + 1) / odds;
        sum += term;
    }
    return log_term(k, n, p) + log(sum);
}

/* The rate at which the tail beyond k holds exp(log_share), by halving between two rates; 0 < k < n. */
static double rate_of(double k, double n, double log_share, bool above)
{
    double inner = log(k / n), outer = above ? inner - 1 + log_share / k : 0; /* P(K >= k) <= (e n p / k)^k */
    for (int halved = 0; halved < 200; halved++) {
        double middle = outer + (inner - outer) / 2;
        if (middle == outer || middle == inner)
            break;
        if (log_tail(k, n, exp(middle), above) < log_share)
            outer = middle;
        else
            inner = middle;
    }
    return exp(inner);
}

lm_status lm_error_bounds(double errors, double trials, double confidence, lm_range *out, lm_fault *fault)
{
    static const double most = 9007199254740992.0; /* 2^53: beyond, doubles are no longer counts */
    if (!(trials >= 1 && trials <= most && trials == floor(trials)))
        return lm_refuse(fault, LM_DOMAIN, "trials", trials, -1, "a whole number from 1 to 2**53");
    if (!(errors >= 0 && errors <= trials && errors == floor(errors)))
        return lm_refuse(fault, LM_DOMAIN, "errors", errors, -1, "a whole number from 0 to trials");
    if (!(confidence > 0 && confidence < 1))
        return lm_refuse(fault, LM_DOMAIN, "confidence", confidence, -1, "a number between 0 and 1");
    double log_share = log((1 - confidence) / 2);
    bool none = errors == 0, all = errors == trials;
    out->low = none ? 0 : all ? exp(log_share / trials) : rate_of(errors, trials, log_share, true);
    out->high = all ? 1 : none ? -expm1(log_share / trials) : rate_of(errors, trials, log_share, false);
    return LM_OK;
}
