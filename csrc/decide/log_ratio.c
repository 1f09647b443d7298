/* Log likelihood ratios and posteriors at a reading, without cancellation, and their tables. */
#include <math.h>

#include "../numeric/fault.h"
#include "../numeric/logspace.h"
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

static void add_terms(lm_log_ratio *ratio, const lm_law *law)
{
    for (size_t t = 0; t < law->density->count; t++) {
        const lm_term *term = &law->density->term[t];
        lm_gap_term *to = &ratio->gap.term[ratio->gap.count++];
        *to = (lm_gap_term){.term = *term, .positive = law->positive, .support = lm_term_support(term)};
        to->term.log_weight += law->log_prior;
        to->log_scale = term->family->lattice || term->scale == 1 ? 0 : log(fabs(term->scale));
        ratio->fallible = ratio->fallible || term->family->fallible;
    }
}

static lm_status from_laws(const lm_law laws[], size_t count, bool probability, lm_log_ratio **out, lm_fault *fault)
{
    *out = NULL;
    size_t terms = 0;
    for (size_t i = 0; i < count; i++) {
        terms += laws[i].density->count;
        if (lm_density_discrete(laws[i].density) != lm_density_discrete(laws[0].density))
            return lm_refuse(fault, LM_MIXED, "states", NAN, -1, "counts in every state, or in none");
    }
    lm_log_ratio *ratio = lm_allocate_zeroed(1, sizeof *ratio);
    if (ratio == NULL)
        return LM_NO_MEMORY;
    ratio->probability = probability;
    ratio->law = lm_allocate(count, sizeof *ratio->law);
    ratio->gap.term = lm_allocate(terms, sizeof *ratio->gap.term);
    if (ratio->law == NULL || ratio->gap.term == NULL) {
        lm_log_ratio_free(ratio);
        return LM_NO_MEMORY;
    }
    for (size_t i = 0; i < count; i++) {
        ratio->law[ratio->laws] = laws[i];
        ratio->law[ratio->laws++].density = lm_density_retain(laws[i].density);
        ratio->masses = ratio->masses || has_atoms(laws[i].density);
        add_terms(ratio, &laws[i]);
    }
    *out = ratio;
    return LM_OK;
}

lm_status lm_log_ratio_new(const lm_density *a, const lm_density *b, lm_log_ratio **out, lm_fault *fault)
{
    lm_law laws[2] = {{.positive = true}, {.positive = false}};
    laws[0].density = lm_density_retain(a); /* from_laws retains for itself */
    laws[1].density = lm_density_retain(b);
    lm_status status = from_laws(laws, 2, false, out, fault);
    lm_density_release(laws[0].density);
    lm_density_release(laws[1].density);
    return status;
}

lm_status lm_posterior_new(const lm_density *const densities[], const double priors[], size_t states, size_t state,
                           lm_log_ratio **out, lm_fault *fault)
{
    *out = NULL;
    lm_law *laws = lm_allocate(states, sizeof *laws);
    if (laws == NULL)
        return LM_NO_MEMORY;
    lm_status status = LM_OK;
    size_t count = 0;
    for (size_t i = 0; i < states && status == LM_OK; i++) {
        if (!(priors[i] >= 0 && isfinite(priors[i])))
            status = lm_refuse(fault, LM_DOMAIN, "priors", priors[i], (ptrdiff_t)i, "a finite number >= 0");
        else if (priors[i] > 0)
            laws[count++] = (lm_law){lm_density_retain(densities[i]), log(priors[i]), i == state};
    }
    if (status == LM_OK && count == 0)
        status = lm_refuse(fault, LM_DOMAIN, "sum of priors", 0, -1, "1 within 1e-9");
    if (status == LM_OK)
        status = from_laws(laws, count, true, out, fault);
    for (size_t i = 0; i < count; i++)
        lm_density_release(laws[i].density);
    lm_release(laws);
    return status;
}

void lm_log_ratio_free(lm_log_ratio *ratio)
{
    if (ratio == NULL)
        return;
    for (size_t i = 0; i < ratio->laws; i++)
        lm_density_release(ratio->law[i].density);
    lm_release(ratio->law);
    lm_release(ratio->gap.term);
    lm_release(ratio);
}

/* Masses and densities by their own logarithms: a mass beats any density, and between the points of a lattice both
 * are zero. Laws that call out have no closed ratio to lose, and are asked for many readings at once. */
static lm_status by_logarithms(const lm_log_ratio *ratio, const double x[], double out[], size_t n)
{
    enum { FEW = 512 };
    double value[FEW], sum[2][FEW];
    for (size_t done = 0; done < n; done += FEW) {
        size_t now = n - done < FEW ? n - done : FEW;
        for (size_t i = 0; i < now; i++)
            sum[0][i] = sum[1][i] = -INFINITY;
        for (size_t k = 0; k < ratio->laws; k++) {
            const lm_law *law = &ratio->law[k];
            LM_TRY(lm_density_log_pdf(law->density, x + done, value, now));
            for (size_t i = 0; i < now; i++)
                sum[law->positive][i] = lm_log_add(sum[law->positive][i], value[i] + law->log_prior);
        }
        for (size_t i = 0; i < now; i++)
            out[done + i] = sum[1][i] - sum[0][i];
    }
    return LM_OK;
}

static lm_status log_odds(const lm_log_ratio *ratio, const double x[], double out[], size_t n)
{
    if (ratio->masses || ratio->fallible)
        return by_logarithms(ratio, x, out, n);
    lm_gap gap = ratio->gap; /* its workspace is this call's own, so that threads do not meet */
    gap.bound = lm_allocate(gap.count, sizeof *gap.bound);
    if (gap.bound == NULL)
        return LM_NO_MEMORY;
    for (size_t i = 0; i < n; i++)
        out[i] = isnan(x[i]) ? x[i] : lm_gap_value(&gap, x[i], LM_AT, NULL);
    lm_release(gap.bound);
    return LM_OK;
}

lm_status lm_log_ratio_values(const void *context, const double x[], double out[], size_t n)
{
    const lm_log_ratio *ratio = context;
    LM_TRY(log_odds(ratio, x, out, n));
    for (size_t i = 0; ratio->probability && i < n; i++)
        out[i] = out[i] < 0 ? exp(out[i]) / (1 + exp(out[i])) : 1 / (1 + exp(-out[i]));
    return LM_OK;
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
    for (size_t k = 0; k < ratio->laws; k++) {
        double edge[2];
        LM_TRY(lm_density_quantile(ratio->law[k].density, RARE, false, &edge[0]));
        LM_TRY(lm_density_quantile(ratio->law[k].density, RARE, true, &edge[1]));
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
    for (size_t k = 0; k < ratio->laws && lm_density_discrete(ratio->law[k].density); k++) {
        double edge[2];
        LM_TRY(lm_density_quantile(ratio->law[k].density, RARE, false, &edge[0]));
        LM_TRY(lm_density_quantile(ratio->law[k].density, RARE, true, &edge[1]));
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
