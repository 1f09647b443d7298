/* Generalized Pareto tails by maximum likelihood. */
#ifndef LM_PARETO_H
#define LM_PARETO_H

#include "../limen.h"

/* Excesses over a threshold, weighted: positive where not all are 0. */
typedef struct {
    const double *excess;
    const double *times;
    size_t count;
} lm_excesses;

/* The tail that, joined to a body of mass `body` whose density at the threshold is `edge` (both in any one unit), is
 * likeliest for the excesses among `total` readings in all: it maximises
 *     sum of times * log decay - total * log(body + edge * scale).
 * With body 0, edge 1 and the number of excesses as total this is the generalized Pareto law by itself. The shape
 * stays from 0 to largest_shape. */
lm_pareto_tail lm_pareto_join(const lm_excesses *data, double body, double edge, double total,
                              double largest_shape);

#endif
