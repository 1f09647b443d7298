/* The incomplete gamma function ratios in the log domain, for shapes from 1e-3 to 1e8. */
#ifndef LM_GAMMA_H
#define LM_GAMMA_H

/* log of x^a exp(-x) / Gamma(a + 1), a > 0, x >= 0: nothing cancels for large a. */
double lm_log_gamma_front(double a, double x);

/* log P(a, x) and log Q(a, x) = log(1 - P(a, x)), x >= 0. */
double lm_log_gamma_p(double a, double x);
double lm_log_gamma_q(double a, double x);

/* x with log P(a, x) = log_p, or with log Q(a, x) = log_p when upper. */
double lm_gamma_quantile(double a, double log_p, int upper);

#endif
