/* Densities as lists of weighted terms: made, mixed, moved, and evaluated over arrays of readings. */
#include <math.h>
#include <string.h>

#include "../numeric/fault.h"
#include "../numeric/logspace.h"
#include "../numeric/memory.h"
#include "family.h"

static const lm_family *const families[] = {
#define LM_ROW(name) &lm_family_##name,
    LM_FAMILIES(LM_ROW)
#undef LM_ROW
};

size_t lm_family_count(void)
{
    return LM_LENGTH(families);
}

const char *lm_family_name(size_t family)
{
    return family < LM_LENGTH(families) ? families[family]->name : NULL;
}

const char *lm_family_parameter(size_t family, size_t parameter)
{
    return family < LM_LENGTH(families) && parameter < LM_PARAMETERS ? families[family]->parameter[parameter].name
                                                                     : NULL;
}

static lm_density *empty(size_t count)
{
    lm_density *density = lm_allocate(sizeof(lm_density) + count * sizeof(lm_term), 1);
    if (density != NULL) {
        atomic_init(&density->references, 1);
        density->count = 0;
    }
    return density;
}

lm_status lm_density_of_term(lm_term *term, lm_density **out)
{
    lm_density *density = empty(1);
    if (density == NULL) {
        lm_term_release(term);
        return LM_NO_MEMORY;
    }
    density->term[density->count++] = *term;
    *out = density;
    return LM_OK;
}

lm_status lm_density_new(const char *family, const double parameters[], size_t count, lm_density **out, lm_fault *fault)
{
    for (size_t i = 0; i < LM_LENGTH(families); i++)
        if (strcmp(families[i]->name, family) == 0) {
            lm_term term;
            LM_TRY(lm_term_make(families[i], parameters, count, &term, fault));
            return lm_density_of_term(&term, out);
        }
    return LM_UNKNOWN;
}

lm_status lm_density_mixture(const double weights[], const lm_density *const parts[], size_t count, lm_density **out,
                             lm_fault *fault)
{
    double sum = 0;
    size_t terms = 0;
    if (count == 0)
        return lm_refuse(fault, LM_SIZE, "weights", 0, -1, "at least one weight");
    for (size_t i = 0; i < count; i++) {
        if (!(weights[i] >= 0 && isfinite(weights[i])))
            return lm_refuse(fault, LM_DOMAIN, "weights", weights[i], (ptrdiff_t)i, "a finite number >= 0");
        sum += weights[i];
        terms += parts[i]->count;
    }
    if (!(fabs(sum - 1) <= 1e-9)) /* the contract for weights and priors alike */
        return lm_refuse(fault, LM_DOMAIN, "sum of weights", sum, -1, "1 within 1e-9");
    lm_density *density = empty(terms);
    if (density == NULL)
        return LM_NO_MEMORY;
    for (size_t i = 0; i < count; i++)
        for (size_t t = 0; t < parts[i]->count && weights[i] > 0; t++) {
            lm_term *term = &density->term[density->count++];
            *term = lm_term_retain(&parts[i]->term[t]);
            term->log_weight += log(weights[i] / sum);
        }
    *out = density;
    return LM_OK;
}

lm_status lm_density_moved(const lm_density *density, double shift, double scale, lm_density **out, lm_fault *fault)
{
    if (!isfinite(shift))
        return lm_refuse(fault, LM_DOMAIN, "shift", shift, -1, "a finite number");
    if (!isfinite(scale) || scale == 0)
        return lm_refuse(fault, LM_DOMAIN, "scale", scale, -1, "a finite number other than 0");
    lm_density *moved = empty(density->count);
    if (moved == NULL)
        return LM_NO_MEMORY;
    for (size_t t = 0; t < density->count; t++) {
        lm_term *term = &moved->term[moved->count++];
        *term = lm_term_retain(&density->term[t]);
        term->shift = shift + scale * term->shift;
        term->scale *= scale;
        if (!isfinite(term->shift) || !isfinite(term->scale) || term->scale == 0) {
            lm_density_release(moved);
            return lm_refuse(fault, LM_DOMAIN, "scale", scale, -1, "a move that stays within finite doubles");
        }
    }
    *out = moved;
    return LM_OK;
}

lm_density *lm_density_retain(const lm_density *density)
{
    lm_density *owned = (lm_density *)(uintptr_t)density; /* the count is the one thing that changes in a density */
    if (owned != NULL)
        atomic_fetch_add_explicit(&owned->references, 1, memory_order_relaxed);
    return owned;
}

void lm_density_release(lm_density *density)
{
    if (density == NULL || atomic_fetch_sub_explicit(&density->references, 1, memory_order_acq_rel) != 1)
        return;
    for (size_t t = 0; t < density->count; t++)
        lm_term_release(&density->term[t]);
    lm_release(density);
}

/* Readings are taken in blocks that stay in the first-level cache. */
enum { BLOCK = 512 };

static bool has_lattice(const lm_density *density, bool lattice)
{
    for (size_t t = 0; t < density->count; t++)
        if (density->term[t].family->lattice == lattice)
            return true;
    return false;
}

/* log of weight times density of one term over a block; -inf off its lattice. */
static void term_block(const lm_term *term, const double x[], double y[], double out[], size_t n)
{
    if (term->family->lattice) {
        for (size_t i = 0; i < n; i++) {
            y[i] = lm_term_standard(term, x[i]);
            y[i] = y[i] == floor(y[i]) || isnan(y[i]) ? y[i] : INFINITY;
        }
    } else if (term->scale == 1) {
        for (size_t i = 0; i < n; i++)
            y[i] = x[i] - term->shift;
    } else {
        for (size_t i = 0; i < n; i++)
            y[i] = (x[i] - term->shift) / term->scale;
    }
    term->family->log_pdf(term, y, out, n);
    double constant = term->log_weight - (term->family->lattice || term->scale == 1 ? 0 : log(fabs(term->scale)));
    if (constant != 0)
        for (size_t i = 0; i < n; i++)
            out[i] += constant;
}

/* The terms of one kind (masses or densities) over a block, added in the log domain. */
static void kind_block(const lm_density *density, bool lattice, const double x[], double out[], size_t n)
{
    double y[BLOCK], value[BLOCK], sum[BLOCK];
    size_t done = 0;
    for (size_t t = 0; t < density->count; t++) {
        const lm_term *term = &density->term[t];
        if (term->family->lattice != lattice)
            continue;
        if (done++ == 0) {
            term_block(term, x, y, out, n);
            for (size_t i = 0; i < n; i++)
                sum[i] = 1;
            continue;
        }
        /* out holds the largest so far, sum the total relative to it: one exponential for each term and reading. */
        term_block(term, x, y, value, n);
        for (size_t i = 0; i < n; i++) {
            double gap = value[i] - out[i];
            if (gap > 0) {
                sum[i] = sum[i] * exp(-gap) + 1;
                out[i] = value[i];
            } else if (gap <= 0) { /* not where both are -inf */
                sum[i] += exp(gap);
            }
        }
    }
    if (done > 1)
        for (size_t i = 0; i < n; i++)
            out[i] += log(sum[i]);
}

static bool may_fail(const lm_density *density)
{
    for (size_t t = 0; t < density->count; t++)
        if (density->term[t].family->fallible)
            return true;
    return false;
}

/* NaN in where there was none going in is how a callback says that it failed. */
static lm_status failed(const lm_density *density, const double x[], const double out[], size_t n)
{
    if (may_fail(density))
        for (size_t i = 0; i < n; i++)
            if (isnan(out[i]) && !isnan(x[i]))
                return LM_CALLBACK;
    return LM_OK;
}

lm_status lm_density_log_pdf(const lm_density *density, const double x[], double out[], size_t n)
{
    bool masses = has_lattice(density, true), densities = has_lattice(density, false);
    double block[BLOCK], atoms[BLOCK];
    for (size_t start = 0; start < n; start += BLOCK) {
        size_t m = n - start < BLOCK ? n - start : BLOCK;
        bool missing = false;
        for (size_t i = 0; i < m; i++) {
            block[i] = x[start + i];
            missing |= isnan(block[i]);
            if (isnan(block[i]))
                block[i] = 0;
        }
        kind_block(density, !densities, block, out + start, m);
        if (masses && densities) { /* where there is an atom, its mass outweighs any density */
            kind_block(density, true, block, atoms, m);
            for (size_t i = 0; i < m; i++)
                if (atoms[i] > -INFINITY)
                    out[start + i] = atoms[i];
        }
        if (missing)
            for (size_t i = 0; i < m; i++)
                if (isnan(x[start + i]))
                    out[start + i] = NAN;
        LM_TRY(failed(density, x + start, out + start, m));
    }
    return LM_OK;
}

/* One tail of each term, added in the log domain. */
static lm_status tail(const lm_density *density, double (*of_term)(const lm_term *, double), const double x[],
                      double out[], size_t n)
{
    for (size_t i = 0; i < n; i++) {
        double total = -INFINITY, reading = x[i];
        if (isnan(reading))
            total = NAN;
        else
            for (size_t t = 0; t < density->count; t++)
                total = lm_log_add(total, density->term[t].log_weight + of_term(&density->term[t], reading));
        out[i] = total > 0 ? 0 : total;
    }
    return failed(density, x, out, n);
}

lm_status lm_density_log_cdf(const lm_density *density, const double x[], double out[], size_t n)
{
    return tail(density, lm_term_log_cdf, x, out, n);
}

lm_status lm_density_log_sf(const lm_density *density, const double x[], double out[], size_t n)
{
    return tail(density, lm_term_log_sf, x, out, n);
}

lm_status lm_density_log_mass(const lm_density *density, double low, double high, double *out)
{
    double total = -INFINITY;
    for (size_t t = 0; t < density->count; t++)
        total = lm_log_add(total, density->term[t].log_weight + lm_term_log_mass(&density->term[t], low, high));
    *out = total > 0 ? 0 : total;
    return isnan(total) ? LM_CALLBACK : LM_OK;
}

lm_status lm_density_moments(const lm_density *density, double *mean, double *variance)
{
    /* The law of total variance: the mean of the variances and the variance of the means. */
    double sum = 0, within = 0, between = 0;
    for (size_t t = 0; t < density->count; t++) {
        const lm_term *term = &density->term[t];
        double m, v;
        term->family->moments(term, &m, &v);
        sum += exp(term->log_weight) * (term->shift + term->scale * m);
        within += exp(term->log_weight) * term->scale * term->scale * v;
    }
    for (size_t t = 0; t < density->count; t++) {
        const lm_term *term = &density->term[t];
        double m, v;
        term->family->moments(term, &m, &v);
        double apart = density->count == 1 ? 0 : term->shift + term->scale * m - sum;
        between += exp(term->log_weight) * apart * apart;
    }
    *mean = sum;
    *variance = isnan(sum) ? NAN : within + between;
    return LM_OK;
}

lm_range lm_density_support(const lm_density *density)
{
    lm_range all = {INFINITY, -INFINITY};
    for (size_t t = 0; t < density->count; t++) {
        lm_range one = lm_term_support(&density->term[t]);
        all.low = fmin(all.low, one.low);
        all.high = fmax(all.high, one.high);
    }
    return all;
}

bool lm_density_discrete(const lm_density *density)
{
    return !has_lattice(density, false);
}
