/* The two pieces of C. Loader's saddle-point form of binomial and Poisson probabilities (Fast and accurate computation
 * of binomial probabilities, 2000), by which nothing cancels for large counts. */
#ifndef LM_COUNTING_H
#define LM_COUNTING_H

/* log n! less Stirling's formula, n > 0. */
double lm_stirling_error(double n);

/* x log(x / mean) - difference, where difference = x - mean is given, as x may be too large to hold it; by its series
 * where the two are close. */
double lm_deviance(double x, double mean, double difference);

#endif
