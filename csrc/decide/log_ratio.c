/* The log likelihood ratio of two densities at a reading, without cancellation. */
#include <math.h>

#include "../numeric/fault.h"
#include "../numeric/memory.h"
#include "crossings.h"
#include "log_ratio.h"
#include "soft_table.h"

static bool has_atoms(const lm_density *density)
{
    for (size_t t = 0; t < density->count; t++)
        if (density->term[t].family->lattice)
            return true;
    return false;
}

static void add_terms(lm_log_ratio *ratio, const lm_density *density, bool positive)
{
    for (size_t t = 0; t < density->count; t++) {
        const lm_term *term = &density->term[t];
        ratio->gap.term[ratio->gap.count++] = (lm_gap_term){
            .term = *term,
            .positive = positive,
            .support = lm_term_support(term),
            .log_scale = term->family->lattice || term->scale == 1 ? 0 : log(fabs(term->scale)),
        };
        ratio->fallible = ratio->fallible || term->family->fallible;
    }
}

lm_status lm_log_ratio_new(const lm_density *a, const lm_density *b, lm_log_ratio **out, lm_fault *fault)
{
    *out = NULL;
    if (lm_density_discrete(a) != lm_density_discrete(b))
        return lm_refuse(fault, LM_MIXED, "states", NAN, -1, "counts in both states, or in neither");
    lm_log_ratio *ratio = lm_allocate_zeroed(1, sizeof *ratio);
    if (ratio == NULL)
        return LM_NO_MEMORY;
    ratio->density[0] = lm_density_retain(a);
    ratio->density[1] = lm_density_retain(b);
    ratio->masses = has_atoms(a) || has_atoms(b);
    ratio->gap.term = lm_allocate(a->count + b->count, sizeof *ratio->gap.term);
    if (ratio->gap.term == NULL) {
        lm_log_ratio_free(ratio);
        return LM_NO_MEMORY;
    }
    add_terms(ratio, a, true);
    add_terms(ratio, b, false);
    *out = ratio;
    return LM_OK;
}

void lm_log_ratio_free(lm_log_ratio *ratio)
{
    if (ratio == NULL)
        return;
    lm_density_release(ratio->density[0]);
    lm_density_release(ratio->density[1]);
    lm_release(ratio->gap.term);
    lm_release(ratio);
}

/* Masses and densities by their own logarithms: a mass beats any density, and between the points of a lattice both
 * are zero. */
static lm_status by_masses(const lm_log_ratio *ratio, const double x[], double out[], size_t n)
{
    double part[64];
    for (size_t done = 0; done < n; done += LM_LENGTH(part)) {
        size_t now = n - done < LM_LENGTH(part) ? n - done : LM_LENGTH(part);
        LM_TRY(lm_density_log_pdf(ratio->density[0], x + done, out + done, now));
        LM_TRY(lm_density_log_pdf(ratio->density[1], x + done, part, now));
        for (size_t i = 0; i < now; i++)
            out[done + i] -= part[i];
    }
    return LM_OK;
}

lm_status lm_log_ratio_values(const void *context, const double x[], double out[], size_t n)
{
    const lm_log_ratio *ratio = context;
    if (ratio->masses)
        return by_masses(ratio, x, out, n);
    lm_gap gap = ratio->gap; /* its workspace is this call's own, so that threads do not meet */
    gap.bound = lm_allocate(gap.count, sizeof *gap.bound);
    if (gap.bound == NULL)
        return LM_NO_MEMORY;
    lm_status status = LM_OK;
    for (size_t i = 0; i < n && status == LM_OK; i++) {
        out[i] = isnan(x[i]) ? x[i] : lm_gap_value(&gap, x[i], LM_AT, NULL);
        if (isnan(out[i]) && !isnan(x[i]) && ratio->fallible)
            status = LM_CALLBACK;
    }
    lm_release(gap.bound);
    return status;
}

/* ---- its table ---- */

#define RARE (-35.0) /* log probability of a reading that may be slow: one in 1e15 */

/* The edges of supports, the landmarks, and where the readings are. */
static lm_status survey(const lm_log_ratio *ratio, lm_points *breaks, lm_soft_function *function)
{
    double low = INFINITY, high = -INFINITY;
    function->scale = INFINITY;
    function->bulk = (lm_range){INFINITY, -INFINITY};
    for (size_t t = 0; t < ratio->gap.count; t++) {
        const lm_term *term = &ratio->gap.term[t].term;
        const lm_range support = ratio->gap.term[t].support;
        double mark[32];
        size_t marks = term->family->landmarks != NULL ? term->family->landmarks(term, mark, LM_LENGTH(mark)) : 0;
        if (isfinite(support.low))
            LM_TRY(lm_points_add(breaks, support.low));
        if (isfinite(support.high)) { /* the edge itself still belongs to the support */
            LM_TRY(lm_points_add(breaks, support.high));
            LM_TRY(lm_points_add(breaks, nextafter(support.high, INFINITY)));
        }
        /* of many (a fitted law's knots) only the ends: it is smooth enough between them for segments to find */
        for (size_t k = 0; k < marks && marks <= LM_LENGTH(mark); k++) {
            double x = term->shift + term->scale * mark[k];
            if (isfinite(x) && x > -0x1p126 && x < 0x1p126)
                LM_TRY(lm_points_add(breaks, x));
        }
        double first = marks > 0 ? term->shift + term->scale * mark[0] : term->shift;
        low = fmin(low, first);
        high = fmax(high, first);
        function->scale = fmin(function->scale, fabs(term->scale));
    }
    for (int k = 0; k < 2; k++) {
        double edge[2];
        LM_TRY(lm_density_quantile(ratio->density[k], RARE, false, &edge[0]));
        LM_TRY(lm_density_quantile(ratio->density[k], RARE, true, &edge[1]));
        function->bulk.low = fmin(function->bulk.low, edge[0]);
        function->bulk.high = fmax(function->bulk.high, edge[1]);
    }
    function->centre = isfinite(low) && isfinite(high) ? 0.5 * low + 0.5 * high : 0;
    if (!(function->scale > 0) || !isfinite(function->scale))
        function->scale = 1;
    lm_points_sort(breaks);
    function->breaks = breaks->count;
    function->at = breaks->at;
    return LM_OK;
}

/* Counts have one table entry each; atoms among continuous readings are left to the exact function. */
static lm_status compile_masses(const lm_log_ratio *ratio, lm_soft **out)
{
    enum { MOST = 1 << 16 };
    const lm_term *term = &ratio->gap.term[0].term;
    lm_soft_plan plan = {.exact = lm_log_ratio_values, .context = ratio, .origin = term->shift};
    plan.step = fabs(term->scale);
    double low = INFINITY, high = -INFINITY;
    for (int k = 0; k < 2 && lm_density_discrete(ratio->density[k]); k++) {
        double edge[2];
        LM_TRY(lm_density_quantile(ratio->density[k], RARE, false, &edge[0]));
        LM_TRY(lm_density_quantile(ratio->density[k], RARE, true, &edge[1]));
        low = fmin(low, edge[0]);
        high = fmax(high, edge[1]);
    }
    const double width = (high - low) / plan.step + 1;
    if (!(width >= 1))
        return lm_soft_new(&plan, out);
    plan.direct_count = width > MOST ? MOST : (size_t)width;
    plan.origin = low;
    double *x = lm_allocate(plan.direct_count, sizeof *x), *value = lm_allocate(plan.direct_count, sizeof *value);
    lm_status status = x != NULL && value != NULL ? LM_OK : LM_NO_MEMORY;
    for (size_t i = 0; i < plan.direct_count && status == LM_OK; i++)
        x[i] = low + (double)i * plan.step;
    if (status == LM_OK)
        status = lm_log_ratio_values(ratio, x, value, plan.direct_count);
    plan.direct = value;
    if (status == LM_OK)
        status = lm_soft_new(&plan, out);
    lm_release(x);
    lm_release(value);
    return status;
}

lm_status lm_log_ratio_compile(const lm_log_ratio *ratio, lm_soft **out)
{
    *out = NULL;
    if (ratio->masses)
        return compile_masses(ratio, out);
    lm_points breaks = {0};
    lm_soft_function function = {.values = lm_log_ratio_values, .context = ratio};
    lm_status status = survey(ratio, &breaks, &function);
    if (status == LM_OK)
        status = lm_soft_compile(&function, out);
    lm_points_free(&breaks);
    return status;
}
