/* Adaptive Gauss-Kronrod quadrature in the log domain: each panel keeps its own relative accuracy, so that the smallest
 * tail is as good as the bulk. The rule is that of R. Piessens et al., QUADPACK (1983), QK15. */
#include "quadrature.h"

#include <float.h>
#include <math.h>

#include "logspace.h"
#include "memory.h"

enum { HALF = 8, POINTS = 2 * HALF - 1, DEPTH = 1200 };

/* The odd ones and 0 are Gauss's with 7 nodes. */
static const double node[HALF] = {
    0.9914553711208126392, 0.9491079123427585245, 0.8648644233597690728, 0.7415311855993944399,
    0.5860872354676911303, 0.4058451513773971669, 0.2077849550078984676, 0};
static const double weight[HALF] = {0.02293532201052922496, 0.06309209262997855329, 0.1047900103222501838,
                                    0.1406532597155259187,  0.1690047266392679028,  0.1903505780647854099,
                                    0.2044329400752988924,  0.2094821410847278280};
static const double gauss[HALF / 2] = {0.1294849661688696933, 0.2797053914892766679, 0.3818300505051189449,
                                       0.4179591836734693878};

/* Also what rounding may do: of the logarithms, and of the places, which matters where they lie far from 0 for the
 * width of the panel. */
static bool apply(lm_log_function f, const void *context, double low, double high, double *log_mass, double *error,
                  double *noise)
{
    double x[POINTS], value[POINTS], middle = 0.5 * low + 0.5 * high, half = 0.5 * high - 0.5 * low;
    for (int i = 0; i < HALF; i++) {
        x[i] = middle - half * node[i];
        x[POINTS - 1 - i] = middle + half * node[i];
    }
    for (int i = 0; i < POINTS; i++) { /* the ends may be poles, and rounding must not land on them */
        x[i] = x[i] > low ? x[i] : nextafter(low, high);
        x[i] = x[i] < high ? x[i] : nextafter(high, low);
    }
    if (!f(context, x, value, POINTS))
        return false;
    double top = -INFINITY, bottom = INFINITY;
    for (int i = 0; i < POINTS; i++) {
        top = fmax(top, value[i]);
        bottom = isinf(value[i]) ? bottom : fmin(bottom, value[i]);
    }
    *error = *noise = 0;
    *log_mass = top;
    if (isinf(top))
        return true;
    *noise = DBL_EPSILON * (8 * fabs(top) + 0.1 * (top - bottom) * (fmax(fabs(low), fabs(high)) / half));
    double fine = 0, coarse = 0;
    for (int i = 0; i < HALF; i++) {
        double pair = exp(value[i] - top) + (i < HALF - 1 ? exp(value[POINTS - 1 - i] - top) : 0);
        fine += weight[i] * pair;
        coarse += i % 2 == 1 ? gauss[i / 2] * pair : 0;
    }
    *log_mass = top + log(fine) + log(half);
    *error = fabs(fine - coarse) / fine;
    return true;
}

bool lm_log_rule(lm_log_function f, const void *context, double low, double high, double *log_mass, double *error)
{
    double noise;
    return apply(f, context, low, high, log_mass, error, &noise);
}

static lm_status keep(lm_log_panels *panels, lm_log_panel panel)
{
    panels->log_sum = lm_log_add(panels->log_sum, panel.log_mass);
    if (panels->sum_only)
        return LM_OK;
    if (panels->count == panels->capacity) {
        size_t capacity = panels->capacity > 0 ? 2 * panels->capacity : 64;
        lm_log_panel *more = lm_reallocate(panels->panel, capacity, sizeof *more);
        if (more == NULL)
            return LM_NO_MEMORY;
        panels->panel = more;
        panels->capacity = capacity;
    }
    panels->panel[panels->count++] = panel;
    return LM_OK;
}

/* Half way by size where the ends lie far apart on one side of 0. */
static double halfway(double low, double high)
{
    if ((low > 0 && high > 4 * low) || (high < 0 && low < 4 * high))
        return copysign(sqrt(fabs(low)) * sqrt(fabs(high)), low);
    return 0.5 * low + 0.5 * high;
}

lm_status lm_log_integrate(lm_log_function f, const void *context, double low, double high, double log_floor,
                           lm_log_panels *panels)
{
    /* The 15 points are far better than the 7: where those come to 1e-11, these come to rounding. */
    const double enough = 1e-11;
    lm_range stack[DEPTH];
    size_t depth = 0;
    if (!(low < high))
        return LM_OK;
    stack[depth++] = (lm_range){low, high};
    while (depth > 0) {
        lm_range p = stack[--depth];
        double log_mass, error, noise, middle = halfway(p.low, p.high);
        panels->tried++;
        if (!apply(f, context, p.low, p.high, &log_mass, &error, &noise))
            return LM_CALLBACK;
        bool good = isinf(log_mass) || log_mass < log_floor || error <= enough + noise;
        bool narrow = p.high - p.low <= fmax(8 * DBL_EPSILON * fmax(fabs(p.low), fabs(p.high)), 0x1p-1030) ||
                      !(middle > p.low && middle < p.high);
        if (good || narrow || panels->tried > panels->most || depth + 2 > DEPTH) {
            if (!good)
                panels->log_error = lm_log_add(panels->log_error, log_mass + log(error));
            LM_TRY(keep(panels, (lm_log_panel){p.low, p.high, log_mass}));
            continue;
        }
        stack[depth++] = (lm_range){middle, p.high};
        stack[depth++] = (lm_range){p.low, middle};
    }
    return LM_OK;
}

void lm_log_panels_free(lm_log_panels *panels)
{
    lm_release(panels->panel);
    *panels = LM_NO_PANELS;
}
