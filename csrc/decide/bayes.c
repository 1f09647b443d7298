/* The rule of least prior-weighted cost: where each pair of decisions changes over, and who is best in each cell. */
#include <float.h>
#include <math.h>
#include <string.h>

#include "../numeric/fault.h"
#include "../numeric/logspace.h"
#include "../numeric/memory.h"
#include "crossings.h"

typedef struct {
    const lm_density *const *density;
    const double *prior;
    const double *costs; /* NULL: one for each wrong decision */
    size_t states;
    size_t decisions;
    bool counts;      /* readings stand on a lattice, or on atoms alone */
    bool atoms;       /* some reading has a mass of its own: masses must be weighed at single readings */
    double origin;    /* of the lattice, */
    double step;      /* and its step; 0 where there is none */
    lm_gap whole;     /* every term of every state, for the coordinate and for who lives where */
    lm_gap pair;      /* workspace for one pair of decisions */
    lm_points breaks; /* support edges and kinks of all continuous terms and continuations */
    lm_points edges;  /* the support edges among them */
    lm_points masses; /* readings to be decided by their masses */
} problem;

static double cost(const problem *p, size_t decision, size_t state)
{
    return p->costs != NULL ? p->costs[decision * p->states + state] : decision == state ? 0 : 1;
}

static bool is_atom(const lm_term *term)
{
    lm_range y = term->family->support(term);
    return term->family->lattice && y.low == y.high;
}

static lm_gap_term gap_term(const lm_term *term, double coefficient)
{
    lm_gap_term t = {.term = *term, .positive = coefficient > 0, .support = lm_term_support(term)};
    t.term.log_weight += log(fabs(coefficient));
    t.log_scale = term->family->lattice || term->scale == 1 ? 0 : log(fabs(term->scale));
    return t;
}

/* Whether two terms follow one law, whatever their weights. */
static bool same_law(const lm_term *a, const lm_term *b)
{
    return a->shift == b->shift && a->scale == b->scale && a->family == b->family && a->data == b->data &&
           memcmp(a->shape, b->shape, sizeof a->shape) == 0 &&
           memcmp(a->constant, b->constant, sizeof a->constant) == 0;
}

/* Adds a term; one law on both sides of the gap is one term with the difference of the weights, or none where they are
 * alike to within their rounding. Left on both sides, it would hide the gap below its own rounding. */
static void add_term(lm_gap *gap, lm_gap_term added)
{
    for (size_t k = 0; k < gap->count; k++) {
        lm_gap_term *t = &gap->term[k];
        double here = t->term.log_weight, there = added.term.log_weight;
        if (t->positive == added.positive || !same_law(&t->term, &added.term))
            continue;
        if (fabs(here - there) <= 8 * DBL_EPSILON * fmax(1, fmax(fabs(here), fabs(there)))) {
            *t = gap->term[--gap->count];
            return;
        }
        t->term.log_weight = here > there ? lm_log_sub(here, there) : lm_log_sub(there, here);
        t->positive = here > there ? t->positive : added.positive;
        return;
    }
    gap->term[gap->count++] = added;
}

/* Coefficients of the gap by which decision e costs more than d. */
static void fill_pair(problem *p, size_t d, size_t e)
{
    p->pair.count = 0;
    for (size_t i = 0; i < p->states; i++) {
        double coefficient = (cost(p, e, i) - cost(p, d, i)) * p->prior[i];
        for (size_t t = 0; t < p->density[i]->count && coefficient != 0; t++)
            if (!is_atom(&p->density[i]->term[t]))
                add_term(&p->pair, gap_term(&p->density[i]->term[t], coefficient));
    }
}

static lm_status check(const problem *p, lm_fault *fault)
{
    double sum = 0;
    for (size_t i = 0; i < p->states; i++) {
        if (!(isfinite(p->prior[i]) && p->prior[i] >= 0))
            return lm_refuse(fault, LM_DOMAIN, "priors", p->prior[i], (ptrdiff_t)i, "a finite number >= 0");
        sum += p->prior[i];
    }
    if (!(fabs(sum - 1) <= 1e-9))
        return lm_refuse(fault, LM_DOMAIN, "sum of priors", sum, -1, "1 within 1e-9");
    if (p->states < 1 || p->decisions < 1 || (p->costs == NULL && p->decisions != p->states))
        return lm_refuse(fault, LM_SIZE, "decisions", (double)p->decisions, -1,
                         "one for each state, or a matrix of costs");
    for (size_t k = 0; p->costs != NULL && k < p->decisions * p->states; k++)
        if (!isfinite(p->costs[k]))
            return lm_refuse(fault, LM_DOMAIN, "costs", p->costs[k], (ptrdiff_t)k, "finite numbers");
    return LM_OK;
}

/* Lattices must be one lattice, and no counts among continuous readings; atoms may stand anywhere. */
static lm_status survey_lattice(problem *p, lm_fault *fault)
{
    bool continuous = false;
    for (size_t i = 0; i < p->states; i++)
        for (size_t t = 0; t < p->density[i]->count; t++) {
            const lm_term *term = &p->density[i]->term[t];
            if (!term->family->lattice) {
                continuous = true;
            } else if (is_atom(term)) {
                p->atoms = true;
            } else if (p->step == 0) {
                p->step = fabs(term->scale);
                p->origin = term->shift;
                p->atoms = true;
            } else {
                double apart = (term->shift - p->origin) / p->step, off = fabs(apart - round(apart));
                double rounding = 4 * DBL_EPSILON * fmax(fabs(apart), fabs(p->origin / p->step));
                if (fabs(fabs(term->scale) - p->step) > 4 * DBL_EPSILON * p->step || off > rounding)
                    return lm_refuse(fault, LM_MIXED, "states", fabs(term->scale), -1,
                                     "counts that share one lattice (the same step and offset)");
            }
        }
    if (continuous && p->step > 0)
        return lm_refuse(fault, LM_MIXED, "states", p->step, -1, "counts in every state, or in none");
    p->counts = !continuous;
    return LM_OK;
}

/* Centre and scale of u, and the readings at which a search must be split. */
static lm_status survey_terms(problem *p)
{
    double low = INFINITY, high = -INFINITY;
    p->whole.scale = INFINITY;
    for (size_t i = 0; i < p->states; i++)
        for (size_t t = 0; t < p->density[i]->count; t++) {
            const lm_term *term = &p->density[i]->term[t];
            lm_range support = lm_term_support(term);
            const double edge[2] = {support.low, support.high};
            for (int k = 0; k < 2; k++)
                if (isfinite(edge[k]) && p->prior[i] > 0) {
                    if (term->family->lattice)
                        LM_TRY(lm_points_add(&p->masses, edge[k]));
                    if (!is_atom(term)) {
                        LM_TRY(lm_points_add(&p->breaks, edge[k]));
                        LM_TRY(lm_points_add(&p->edges, edge[k]));
                    }
                }
            if (is_atom(term))
                continue;
            p->whole.scale = fmin(p->whole.scale, fabs(term->scale));
            p->whole.power_tails |= term->family->tail_range != NULL;
            if (p->prior[i] > 0)
                p->whole.term[p->whole.count++] = gap_term(term, 1);
            double first = term->shift;
            if (term->family->landmarks != NULL) {
                double few[8], *mark = few;
                size_t count = term->family->landmarks(term, few, LM_LENGTH(few));
                if (count > LM_LENGTH(few)) {
                    mark = lm_allocate(count, sizeof *mark);
                    if (mark == NULL)
                        return LM_NO_MEMORY;
                    term->family->landmarks(term, mark, count);
                }
                lm_status status = LM_OK;
                for (size_t k = 0; k < count && status == LM_OK; k++) {
                    double x = term->shift + term->scale * mark[k];
                    first = k == 0 ? x : first;
                    status = isfinite(x) ? lm_points_add(&p->breaks, x) : LM_OK;
                }
                if (mark != few)
                    lm_release(mark);
                LM_TRY(status);
            }
            low = fmin(low, first);
            high = fmax(high, first);
        }
    p->whole.centre = low <= high ? 0.5 * low + 0.5 * high : 0;
    if (!isfinite(p->whole.scale))
        p->whole.scale = 1;
    p->pair.centre = p->whole.centre;
    p->pair.scale = p->whole.scale;
    p->pair.power_tails = p->whole.power_tails;
    LM_TRY(lm_points_add(&p->breaks, p->whole.centre));
    lm_points_sort(&p->breaks);
    lm_points_sort(&p->edges);
    lm_points_sort(&p->masses);
    return LM_OK;
}

/* Two Gaussian terms against each other, the commonest case, have their levels in closed form. */
static bool is_gaussian_pair(const lm_gap *gap)
{
    return gap->count == 2 && gap->term[0].positive != gap->term[1].positive &&
           gap->term[0].term.family == &lm_family_gaussian && gap->term[1].term.family == &lm_family_gaussian;
}

static lm_status find_levels(problem *p, lm_points *levels, lm_search *search)
{
    for (size_t d = 0; d < p->decisions; d++)
        for (size_t e = d + 1; e < p->decisions; e++) {
            fill_pair(p, d, e);
            double at[2];
            size_t count;
            if (is_gaussian_pair(&p->pair) && lm_gaussian_pair(&p->pair, at, &count)) {
                for (size_t k = 0; k < count; k++)
                    LM_TRY(lm_points_add(levels, at[k]));
            } else if (p->pair.count > 0) {
                LM_TRY(lm_gap_crossings(&p->pair, &p->breaks, levels, search));
            }
        }
    for (size_t k = 0; k < p->edges.count; k++)
        LM_TRY(lm_points_add(levels, p->edges.at[k]));
    lm_points_sort(levels);
    return LM_OK;
}

/* Also whether the densities could be told apart there. */
static size_t best_inside(problem *p, double x, lm_side side, bool *told)
{
    size_t best = 0;
    *told = true;
    for (size_t e = 1; e < p->decisions; e++) {
        fill_pair(p, best, e);
        double h = lm_gap_value(&p->pair, x, side, NULL);
        *told &= h != 0;
        if (h < 0)
            best = e;
    }
    return best;
}

static bool is_void(const problem *p, double x, lm_side side)
{
    for (size_t i = 0; i < p->whole.count; i++) {
        const lm_range s = p->whole.term[i].support;
        if (side == LM_FROM_RIGHT ? s.low <= x && x < s.high : s.low <= x && x <= s.high)
            return false;
    }
    return true;
}

static const size_t nobody = SIZE_MAX;

/* A reading of the cell from low up to high, and the side from which to look at it. */
static double reading_of_cell(const problem *p, double low, double high, lm_side *side)
{
    double x = low < high ? lm_gap_middle(&p->whole, low, high) : low;
    bool within = x > low && x < high;
    *side = within ? LM_AT : LM_FROM_RIGHT; /* the one reading of a cell between neighbouring doubles is its level */
    return within ? x : low;
}

/* The decision of each cell between the levels; nobody where no state has density. */
static void decide_cells(problem *p, const lm_points *levels, size_t decision[])
{
    for (size_t k = 0; k <= levels->count; k++) {
        double low = k == 0 ? -DBL_MAX : levels->at[k - 1], high = k == levels->count ? DBL_MAX : levels->at[k];
        lm_side side;
        double x = reading_of_cell(p, low, high, &side);
        bool told = true;
        decision[k] = is_void(p, x, side) ? nobody : best_inside(p, x, side, &told);
        /* far out both may be too small for doubles: ask nearer the level */
        for (int i = 0; !told && i < 16 && levels->count > 0 && (k == 0 || k == levels->count); i++) {
            x = k == 0 ? lm_gap_middle(&p->whole, x, high) : lm_gap_middle(&p->whole, low, x);
            if (x > low && x < high)
                decision[k] = is_void(p, x, LM_AT) ? nobody : best_inside(p, x, LM_AT, &told);
        }
    }
}

/* Whether two decisions differ at x by more than the logarithms there are rounded. */
static bool differ_surely(problem *p, size_t d, size_t e, double x, lm_side side)
{
    lm_gap *gap = &p->pair;
    fill_pair(p, d, e);
    for (size_t i = 0; i < gap->count; i++)
        gap->bound[i].at_middle = -INFINITY;
    double h = lm_gap_value(gap, x, side, NULL), top[2] = {-INFINITY, -INFINITY};
    for (size_t i = 0; i < gap->count; i++)
        top[gap->term[i].positive] = fmax(top[gap->term[i].positive], gap->bound[i].at_middle);
    return fabs(h) > 8 * DBL_EPSILON * (1 + fabs(top[0]) + fabs(top[1])) || isinf(h);
}

/* Merges cells of one decision, divides voids between their neighbours, and drops cells as narrow as the rounding of a
 * level between two cells of one decision (a touch). Works in place; decision keeps count + 1 entries. */
static void merge_cells(problem *p, lm_points *levels, size_t decision[], lm_search *search)
{
    size_t n = levels->count + 1, kept = 0;
    for (size_t k = 0; k < n; k++) { /* voids: the nearer edge's decision, divided at the middle */
        if (decision[k] != nobody)
            continue;
        if (k == 0 && n > 1)
            decision[0] = decision[1];
        else if (k == n - 1)
            decision[k] = k > 0 ? decision[k - 1] : 0;
        else if (decision[k - 1] != decision[k + 1] && decision[k + 1] != nobody)
            levels->at[k] = 0.5 * levels->at[k - 1] + 0.5 * levels->at[k], decision[k] = decision[k - 1];
        else
            decision[k] = decision[k - 1];
    }
    if (decision[0] == nobody)
        decision[0] = 0;
    double *at = levels->at;
    for (size_t k = 1; k < n; k++) {
        double low = at[k - 1];
        if (decision[k] == decision[kept])
            continue;
        bool narrow = k + 1 < n && decision[k + 1] == decision[kept] &&
                      at[k] - low <= 4 * DBL_EPSILON * fmax(fabs(low), fabs(at[k]));
        if (narrow) {
            lm_side side;
            double x = reading_of_cell(p, low, at[k], &side);
            if (!differ_surely(p, decision[kept], decision[k], x, side)) {
                search->touches++;
                continue;
            }
        }
        at[kept] = low;
        decision[++kept] = decision[k];
    }
    levels->count = kept;
}

/* ---- single readings with masses ---- */

/* The best decision at a reading by the masses there; nobody where there are none. */
static size_t best_by_mass(const problem *p, double x)
{
    size_t best = nobody;
    for (size_t e = 0; e < p->decisions; e++) {
        double sum[2] = {-INFINITY, -INFINITY};
        bool any = false;
        for (size_t i = 0; i < p->states; i++)
            for (size_t t = 0; t < p->density[i]->count; t++) {
                const lm_term *term = &p->density[i]->term[t];
                double y = lm_term_standard(term, x), mass = -INFINITY;
                lm_range support = term->family->support(term);
                if (!term->family->lattice || p->prior[i] == 0 || y != floor(y) || y < support.low || y > support.high)
                    continue;
                any = true;
                term->family->log_pdf(term, &y, &mass, 1);
                double coefficient = best == nobody ? 0 : (cost(p, e, i) - cost(p, best, i)) * p->prior[i];
                if (coefficient != 0)
                    sum[coefficient > 0] =
                        lm_log_add(sum[coefficient > 0], mass + term->log_weight + log(fabs(coefficient)));
            }
        if (!any)
            return nobody;
        if (best == nobody || sum[1] < sum[0])
            best = e;
    }
    return best;
}

static double on_lattice(const problem *p, double x, bool beyond)
{
    double y = (x - p->origin) / p->step, whole = round(y);
    double rounding = 4 * DBL_EPSILON * fmax(fabs(whole), fabs(p->origin / p->step));
    y = fabs(y - whole) <= rounding ? whole + (beyond ? 1 : 0) : ceil(y);
    return p->origin + p->step * y;
}

/* The first reading after one that has a mass of its own. */
static double next_reading(const problem *p, double x)
{
    return p->step > 0 ? on_lattice(p, x, true) : nextafter(x, INFINITY);
}

static size_t decision_at(const lm_points *levels, const size_t decision[], double x)
{
    size_t k = 0;
    while (k < levels->count && levels->at[k] <= x)
        k++;
    return decision[k];
}

/* Atoms alone: between two of them that differ, the level stands half way. */
static lm_status decide_atoms(const problem *p, lm_points *levels, size_t **decision)
{
    levels->count = 0;
    *decision = lm_allocate(p->masses.count + 1, sizeof **decision);
    if (*decision == NULL)
        return LM_NO_MEMORY;
    (*decision)[0] = p->masses.count > 0 ? best_by_mass(p, p->masses.at[0]) : 0;
    for (size_t k = 1; k < p->masses.count; k++) {
        size_t now = best_by_mass(p, p->masses.at[k]);
        if (now == (*decision)[levels->count])
            continue;
        LM_TRY(lm_points_add(levels, 0.5 * p->masses.at[k - 1] + 0.5 * p->masses.at[k]));
        (*decision)[levels->count] = now;
    }
    return LM_OK;
}

/* Puts the decisions of readings with masses of their own into a rule of intervals. */
static lm_status insert_masses(const problem *p, lm_points *levels, size_t **decision)
{
    lm_points all = {0};
    size_t *merged = NULL;
    lm_status status = LM_OK;
    for (size_t k = 0; k < levels->count && status == LM_OK; k++) {
        levels->at[k] = p->step > 0 ? on_lattice(p, levels->at[k], false) : levels->at[k];
        status = lm_points_add(&all, levels->at[k]);
    }
    for (size_t k = 0; k < p->masses.count && status == LM_OK; k++) {
        status = lm_points_add(&all, p->masses.at[k]);
        if (status == LM_OK)
            status = lm_points_add(&all, next_reading(p, p->masses.at[k]));
    }
    if (status != LM_OK)
        goto done;
    lm_points_sort(&all);
    merged = lm_allocate(all.count + 1, sizeof *merged);
    if (merged == NULL) {
        status = LM_NO_MEMORY;
        goto done;
    }
    size_t kept = 0, mass = 0, count = all.count;
    merged[0] = (*decision)[0];
    for (size_t k = 0; k < count; k++) {
        double x = all.at[k];
        while (mass < p->masses.count && p->masses.at[mass] < x)
            mass++;
        size_t now = mass < p->masses.count && p->masses.at[mass] == x ? best_by_mass(p, x) : nobody;
        if (now == nobody)
            now = decision_at(levels, *decision, x);
        if (now == merged[kept])
            continue;
        all.at[kept] = x;
        merged[++kept] = now;
    }
    all.count = kept;
    lm_points_free(levels);
    lm_release(*decision);
    *levels = all;
    *decision = merged;
    return LM_OK;
done:
    lm_points_free(&all);
    lm_release(merged);
    return status;
}

static lm_status solve(problem *p, lm_rule *out)
{
    lm_points levels = {0};
    size_t *decision = NULL;
    lm_search search = {0};
    lm_status status;
    if (p->whole.count == 0) {
        status = decide_atoms(p, &levels, &decision);
    } else {
        status = find_levels(p, &levels, &search);
        if (status == LM_OK) {
            decision = lm_allocate(levels.count + 1, sizeof *decision);
            status = decision == NULL ? LM_NO_MEMORY : LM_OK;
        }
        if (status == LM_OK) {
            decide_cells(p, &levels, decision);
            merge_cells(p, &levels, decision, &search);
            if (p->atoms)
                status = insert_masses(p, &levels, &decision);
        }
    }
    if (status != LM_OK) {
        lm_points_free(&levels);
        lm_release(decision);
        return status;
    }
    *out = (lm_rule){.count = levels.count, .levels = levels.at, .decisions = decision, .search = search};
    return LM_OK;
}

static lm_status workspace(lm_gap *gap, size_t terms)
{
    gap->term = lm_allocate(terms, sizeof *gap->term);
    gap->bound = lm_allocate(terms, sizeof *gap->bound);
    gap->order = lm_allocate(terms, sizeof *gap->order);
    return gap->term == NULL || gap->bound == NULL || gap->order == NULL ? LM_NO_MEMORY : LM_OK;
}

static void free_workspace(lm_gap *gap)
{
    lm_release(gap->term);
    lm_release(gap->bound);
    lm_release(gap->order);
}

/* A callback that failed gives NaN wherever it is asked. */
static lm_status check_callbacks(const problem *p)
{
    for (size_t i = 0; i < p->states; i++) {
        double at = p->whole.centre, value;
        LM_TRY(lm_density_log_pdf(p->density[i], &at, &value, 1));
    }
    return LM_OK;
}

lm_status lm_bayes(const lm_density *const densities[], const double priors[], size_t states, const double *costs,
                   size_t decisions, lm_rule *out, lm_fault *fault)
{
    problem p = {.density = densities, .prior = priors, .costs = costs, .states = states, .decisions = decisions};
    LM_TRY(check(&p, fault));
    LM_TRY(survey_lattice(&p, fault));
    size_t terms = 0;
    for (size_t i = 0; i < states; i++)
        terms += densities[i]->count;
    lm_status status = workspace(&p.whole, terms);
    if (status == LM_OK)
        status = workspace(&p.pair, terms);
    if (status == LM_OK)
        status = survey_terms(&p);
    if (status == LM_OK)
        status = check_callbacks(&p);
    if (status == LM_OK)
        status = solve(&p, out);
    free_workspace(&p.whole);
    free_workspace(&p.pair);
    lm_points_free(&p.breaks);
    lm_points_free(&p.edges);
    lm_points_free(&p.masses);
    return status;
}

void lm_rule_free(lm_rule *rule)
{
    lm_release(rule->levels);
    lm_release(rule->decisions);
    *rule = (lm_rule){0};
}
