/* Student's t law in the log domain, for dof from 0.1 to 1e9 and any t that a double holds. */
#ifndef LM_STUDENT_H
#define LM_STUDENT_H

/* log of the density at 0: log of Gamma((dof + 1) / 2) / (sqrt(pi dof) Gamma(dof / 2)). */
double lm_student_log_peak(double dof);

/* log(1 + t^2 / dof), also where t^2 overflows. */
double lm_student_log_spread(double dof, double t);

/* log P(T > t); log P(T <= t) is that of -t. log_peak as above. */
double lm_student_log_sf(double dof, double log_peak, double t);

/* t with log P(T > t) = log_p. */
double lm_student_isf(double dof, double log_peak, double log_p);

#endif
