/* The standard normal law in the log domain: both tails, intervals, and quantiles from log probabilities. */
#ifndef LM_NORMAL_H
#define LM_NORMAL_H

/* log P(Z <= z) and log P(Z > z); relative error of the logarithm a few 1e-16 for all z. */
double lm_normal_log_cdf(double z);
double lm_normal_log_sf(double z);

/* log P(a < Z <= b) for a < b, without cancellation for narrow intervals and in both tails. */
double lm_normal_log_mass(double a, double b);

/* z with log P(Z <= z) = log_p, for log_p <= 0 down to -1e300. */
double lm_normal_quantile_log(double log_p);

#endif
