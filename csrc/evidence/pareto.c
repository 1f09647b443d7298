/* The likeliest generalized Pareto tail, found along the one ratio shape / scale (S. D. Grimshaw, Technometrics 35,
 * 1993, 185-191), by itself or joined to a body.
 *
 * Shapes below 0 are not looked for: a law that ends just beyond the largest reading seen would call the next larger
 * one impossible, and a decision rule built on it would be sure of what was merely not seen.
 */
#include "pareto.h"

#include <float.h>
#include <math.h>

#include "../numeric/fault.h"
#include "../numeric/memory.h"

typedef struct {
    const lm_excesses *data;
    double body, edge, total, largest_shape;
} problem;

typedef struct {
    double scale, shape, likelihood, slope; /* slope: d likelihood / d log ratio */
} profile;

/* The positive root of total unit s^2 - spread unit s - spread body = 0: the scale of an exponential tail (unit = edge,
 * spread = sum of excesses), or the shape for a given ratio (unit = edge / ratio, spread = sum of log(1 + ratio y)). */
static double balance(const problem *p, double spread, double unit)
{
    return 0.5 * spread / p->total * (1 + sqrt(1 + 4 * p->total * p->body / (spread * unit)));
}

/* The best shape for a ratio, in closed form, and the likelihood there. By the envelope theorem its slope along the
 * ratio needs no derivative of the shape. */
static profile along(const problem *p, double log_ratio)
{
    double ratio = exp(log_ratio), sum = 0, fall = 0;
    for (size_t i = 0; i < p->data->count; i++) {
        double z = ratio * p->data->excess[i];
        sum += p->data->times[i] * (z <= DBL_MAX ? log1p(z) : log_ratio + log(p->data->excess[i]));
        fall += p->data->times[i] / (1 + 1 / z);
    }
    double shape = fmin(balance(p, sum, p->edge / ratio), p->largest_shape), scale = shape / ratio;
    double mass = p->body + p->edge * scale;
    return (profile){scale, shape, -(1 / shape + 1) * sum - p->total * log(mass),
                     -(1 / shape + 1) * fall + p->total * p->edge * scale / mass};
}

static profile exponential(const problem *p)
{
    double sum = 0;
    for (size_t i = 0; i < p->data->count; i++)
        sum += p->data->times[i] * p->data->excess[i];
    double scale = balance(p, sum, p->edge);
    return (profile){scale, 0, -sum / scale - p->total * log(p->body + p->edge * scale), 0};
}

/* A change of sign of the slope between two ratios, by bisection and false position in turn. */
static profile refine(const problem *p, double low, double high, profile at_low, profile at_high)
{
    profile best = at_low.likelihood > at_high.likelihood ? at_low : at_high;
    for (int i = 0; i < 100 && high - low > 4 * DBL_EPSILON * fmax(1, fabs(low)); i++) {
        double middle = i % 3 == 2 ? 0.5 * (low + high)
                                   : low + (high - low) * at_low.slope / (at_low.slope - at_high.slope);
        if (!(middle > low && middle < high))
            middle = 0.5 * (low + high);
        if (!(middle > low && middle < high))
            break;
        profile here = along(p, middle);
        best = here;
        if (here.slope > 0) {
            low = middle;
            at_low = here;
        } else if (here.slope < 0) {
            high = middle;
            at_high = here;
        } else {
            break;
        }
    }
    return best;
}

/* Standard errors from the observed information of the tail by itself; where the shape stands at 0 only because it may
 * not be less, that need not be a peak, and the expected information serves (R. L. Smith, Ann. Statist. 15, 1987,
 * 1174-1207). */
static void errors(const lm_excesses *data, lm_pareto_tail *tail)
{
    double xi = tail->shape, count = 0, logs = 0, s1 = 0, s2 = 0, s12 = 0, z2 = 0, z3 = 0;
    for (size_t i = 0; i < data->count; i++) {
        double z = data->excess[i] / tail->scale, w = 1 + xi * z, times = data->times[i];
        count += times;
        logs += times * log1p(xi * z);
        s1 += times * z / w;
        s12 += times * z / (w * w);
        s2 += times * z * z / (w * w);
        z2 += times * z * z;
        z3 += times * z * z * z;
    }
    double scale_scale = -(count - (1 + xi) * (s1 + s12)) / (tail->scale * tail->scale);
    double scale_shape = -(s1 - (1 + xi) * s2) / tail->scale;
    /* Below 1e-3 the closed form loses to 1 / shape^3 what its limit at 0 loses to the next term. */
    double shape_shape = xi < 1e-3 ? 2 * z3 / 3 - z2
                                   : 2 * logs / (xi * xi * xi) - 2 * s1 / (xi * xi) - (1 / xi + 1) * s2;
    double determinant = scale_scale * shape_shape - scale_shape * scale_shape;
    bool regular = xi > 0 && determinant > 0 && shape_shape > 0;
    tail->scale_error = regular ? sqrt(shape_shape / determinant) : tail->scale * sqrt(2 * (1 + xi) / count);
    tail->shape_error = regular ? sqrt(scale_scale / determinant) : (1 + xi) / sqrt(count);
}

enum { SCAN = 48 };

lm_pareto_tail lm_pareto_join(const lm_excesses *data, double body, double edge, double total,
                              double largest_shape)
{
    problem p = {data, body, edge, total, largest_shape};
    double count = 0, sum = 0, least = INFINITY, most = 0;
    for (size_t i = 0; i < data->count; i++) {
        count += data->times[i];
        sum += data->times[i] * data->excess[i];
        most = fmax(most, data->excess[i]);
        if (data->excess[i] > 0)
            least = fmin(least, data->excess[i]);
    }
    profile best = exponential(&p), here, before = {0};
    /* A ratio of 1e-4 / the mean is exponential for any sample that memory holds; above 1e4 / the least excess nothing
     * but the sum of logarithms is left, and the likelihood falls. */
    double from = log(1e-4 * count / sum), to = fmax(log(1e4 / least), from + 1), at = from;
    for (int i = 0; most > 0 && largest_shape > 0 && i <= SCAN; i++, before = here) {
        double last = at;
        at = from + (to - from) * i / SCAN;
        here = along(&p, at);
        if (i > 0 && before.slope > 0 && here.slope <= 0) {
            profile top = refine(&p, last, at, before, here);
            if (top.likelihood > best.likelihood)
                best = top;
        }
    }
    lm_pareto_tail tail = {.readings = count, .scale = best.scale, .shape = best.shape};
    tail.log_likelihood = best.likelihood + total * log(body + edge * best.scale) - count * log(best.scale);
    errors(data, &tail);
    return tail;
}

lm_status lm_pareto_fit(const double readings[], size_t n, double threshold, lm_pareto_tail *out, lm_fault *fault)
{
    double *excess = lm_allocate(n, sizeof(double)), *times = lm_allocate(n, sizeof(double));
    lm_status status = LM_NO_MEMORY;
    size_t count = 0;
    if (excess == NULL || times == NULL)
        goto done;
    for (size_t i = 0; i < n; i++) {
        if (!isfinite(readings[i])) {
            status = lm_refuse(fault, LM_DOMAIN, "readings", readings[i], (ptrdiff_t)i, "finite numbers");
            goto done;
        }
        if (readings[i] > threshold) {
            excess[count] = readings[i] - threshold;
            times[count++] = 1;
        }
    }
    if (!isfinite(threshold)) {
        status = lm_refuse(fault, LM_DOMAIN, "threshold", threshold, -1, "a finite number");
        goto done;
    }
    if (count < 2) {
        status = lm_refuse(fault, LM_SIZE, "readings", (double)count, -1, "at least 2 readings above the threshold");
        goto done;
    }
    lm_excesses data = {excess, times, count};
    *out = lm_pareto_join(&data, 0, 1, (double)count, INFINITY);
    status = LM_OK;
done:
    lm_release(excess);
    lm_release(times);
    return status;
}
