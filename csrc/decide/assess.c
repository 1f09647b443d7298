/* What a rule will do: the probability of each decision in each state, and what that costs, in the log domain. */
#include <math.h>

#include "../limen.h"
#include "../numeric/logspace.h"

lm_status lm_transition(const double levels[], const size_t decisions_of[], size_t count,
                        const lm_density *const densities[], size_t states, size_t decisions, double log_transition[])
{
    for (size_t k = 0; k < decisions * states; k++)
        log_transition[k] = -INFINITY;
    for (size_t k = 0; k <= count; k++)
        if (decisions_of[k] >= decisions)
            return LM_SIZE;
    for (size_t i = 0; i < states; i++)
        for (size_t k = 0; k <= count; k++) {
            double low = k == 0 ? -INFINITY : levels[k - 1], high = k == count ? INFINITY : levels[k], mass;
            double *total = &log_transition[decisions_of[k] * states + i];
            LM_TRY(lm_density_log_mass(densities[i], low, high, &mass));
            *total = fmin(lm_log_add(*total, mass), 0);
        }
    return LM_OK;
}

void lm_log_risk(const double log_transition[], const double priors[], size_t states, const double *costs,
                 size_t decisions, double *log_positive, double *log_negative)
{
    *log_positive = *log_negative = -INFINITY;
    for (size_t d = 0; d < decisions; d++)
        for (size_t i = 0; i < states; i++) {
            double wrong = d == i || d >= states ? 0 : 1, cost = costs != NULL ? costs[d * states + i] : wrong;
            if (cost == 0 || priors[i] == 0)
                continue;
            double *sum = cost > 0 ? log_positive : log_negative;
            *sum = lm_log_add(*sum, log(fabs(cost)) + log(priors[i]) + log_transition[d * states + i]);
        }
}
