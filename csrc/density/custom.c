/* A law that the caller's own function computes: where its mass is, how much, and its tails, found by quadrature.
 *
 * The standard law is the caller's, in units of a power of two near its narrowest peak, so that readings go to the
 * callback as they came. At the making the function is searched for modes, from grids that double around 0, around the
 * ends of the support and around each mode found. Panels of Gauss-Kronrod then cover the mass, and the masses below and
 * above each are summed from its own end; a tail is one part of a panel and one such sum. Beyond the panels (a part in
 * 1e300) a tail is integrated when it is asked for.
 */
#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "../numeric/constants.h"
#include "../numeric/fault.h"
#include "../numeric/logspace.h"
#include "../numeric/memory.h"
#include "../numeric/quadrature.h"
#include "family.h"

#define FARTHEST 0x1p1023
#define TABLE_FLOOR (-690.0) /* log of what few sums notice; functions often lose digits below the smallest doubles */

enum { MOST_PLACES = 64, MARKS_EACH = 6, BLOCK = 512 };

/* Where the density is high, and how far from there it falls to exp(-1/2) of that. */
typedef struct {
    double at, width;
    double log_bulk; /* height times width */
} place;

/* Squares overflow half way to the largest double, and then say -inf where there is a tail. Past `from` the log density
 * goes on as it came: in proportion to a power of the reading, or by a power of the reading. */
typedef struct {
    double from, value;
    double power;    /* of the log density; 0 where the density itself is a power */
    double exponent; /* of that */
} continuation;

typedef struct {
    lm_shared shared;
    lm_log_pdf_callback call;
    void *context;
    void (*release)(void *context);
    lm_range support;
    continuation beyond[2]; /* at the lower and at the upper end */
    double scale, log_scale;
    place place[MOST_PLACES];
    size_t places;
    bool infinite; /* +inf was seen */
    lm_log_panels table;
    double *below, *above; /* log masses of all below and of all above each panel */
    double log_total;
    double tail_index[2]; /* of a power tail's mass; large where it falls faster */
    double log_beyond[2]; /* log mass beyond the table */
    double mean, variance;
    double mark[MOST_PLACES * (MARKS_EACH + 2)];
    size_t marks;
} law;

static const law *of(const lm_term *term)
{
    return (const law *)(const void *)term->data;
}

static bool asked(const law *l, double x)
{
    return x >= l->support.low && x <= l->support.high && x > l->beyond[0].from && x < l->beyond[1].from;
}

/* What is known without the caller's function: -inf outside the support, and far tails. */
static double unasked(const law *l, double x)
{
    const continuation *c = &l->beyond[x > 0];
    if (x < l->support.low || x > l->support.high || isinf(x) || isinf(c->from))
        return -INFINITY;
    double away = log(x / c->from);
    return c->power > 0 ? c->value * exp(c->power * away) : c->value + c->exponent * away;
}

static bool evaluate(const void *context, const double x[], double out[], size_t n)
{
    const law *l = context;
    double inside[BLOCK], value[BLOCK];
    for (size_t start = 0; start < n; start += BLOCK) {
        size_t count = 0, m = n - start < BLOCK ? n - start : BLOCK;
        for (size_t i = start; i < start + m; i++)
            if (asked(l, x[i]))
                inside[count++] = x[i];
        if (count > 0 && !l->call(l->context, inside, value, count))
            return false;
        for (size_t i = 0; i < count; i++)
            if (isnan(value[i]))
                return false;
        for (size_t i = start, k = 0; i < start + m; i++)
            out[i] = asked(l, x[i]) ? value[k++] : unasked(l, x[i]);
    }
    return true;
}

/* Where the function gives up far out, on the sides where the support does not end. */
static lm_status find_continuations(law *l)
{
    enum { FIRST = 300, COUNT = 724, BACK = 64 };
    for (int side = 0; side < 2; side++)
        l->beyond[side].from = side == 0 ? -INFINITY : INFINITY;
    for (int side = 0; side < 2; side++) {
        double x[COUNT], value[COUNT];
        if (isfinite(side == 0 ? l->support.low : l->support.high))
            continue;
        for (int k = 0; k < COUNT; k++)
            x[k] = ldexp(side == 0 ? -1 : 1, FIRST + k);
        if (!evaluate(l, x, value, COUNT))
            return LM_CALLBACK;
        int last = 0;
        while (last < COUNT && isfinite(value[last]))
            last++;
        if (last == COUNT || last < BACK + 8)
            continue;
        last -= 4; /* away from where a part of it overflows */
        double power = log(value[last] / value[last - BACK]) / (BACK * LM_LN2);
        l->beyond[side] = (continuation){x[last], value[last], power > 0.1 ? power : 0,
                                         (value[last] - value[last - BACK]) / (BACK * LM_LN2)};
    }
    return LM_OK;
}

/* ---- where the mass is ---- */

typedef struct {
    double *x, *value;
    size_t count, capacity;
} grid;

static bool inside_support(const law *l, double x)
{
    return x > l->support.low && x < l->support.high && fabs(x) <= FARTHEST;
}

static lm_status add_point(const law *l, grid *g, double x)
{
    if (!inside_support(l, x))
        return LM_OK;
    if (g->count == g->capacity) {
        size_t capacity = g->capacity > 0 ? 2 * g->capacity : 4096;
        double *more = lm_reallocate(g->x, capacity, sizeof *more);
        if (more == NULL)
            return LM_NO_MEMORY;
        g->x = more;
        g->capacity = capacity;
    }
    g->x[g->count++] = x;
    return LM_OK;
}

static int ascending(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

static lm_status settle_grid(const law *l, grid *g)
{
    size_t kept = 0;
    if (g->count > 1)
        qsort(g->x, g->count, sizeof *g->x, ascending);
    for (size_t i = 0; i < g->count; i++)
        if (kept == 0 || g->x[i] != g->x[kept - 1])
            g->x[kept++] = g->x[i];
    g->count = kept;
    g->value = lm_allocate(kept, sizeof *g->value);
    if (g->value == NULL)
        return LM_NO_MEMORY;
    return evaluate(l, g->x, g->value, kept) ? LM_OK : LM_CALLBACK;
}

/* Points at doubling distances on both sides. */
static lm_status add_doubling(const law *l, grid *g, double centre, int first, int last)
{
    LM_TRY(add_point(l, g, centre));
    for (int k = first; k <= last; k++) {
        LM_TRY(add_point(l, g, centre - ldexp(1, k)));
        LM_TRY(add_point(l, g, centre + ldexp(1, k)));
    }
    return LM_OK;
}

static lm_status first_grid(const law *l, grid *g)
{
    enum { EQUAL = 256 };
    LM_TRY(add_doubling(l, g, 0, -1022, 1023));
    const double edge[2] = {l->support.low, l->support.high};
    for (int k = 0; k < 2; k++)
        if (isfinite(edge[k]) && edge[k] != 0)
            LM_TRY(add_doubling(l, g, edge[k], -1022, 1023));
    for (int k = 1; k < EQUAL && isfinite(edge[0]) && isfinite(edge[1]); k++)
        LM_TRY(add_point(l, g, edge[0] + (edge[1] - edge[0]) * k / EQUAL));
    return settle_grid(l, g);
}

/* Even near the place, then at distances that grow. */
static lm_status grid_around(const law *l, const place *p, grid *g)
{
    double away = 0;
    LM_TRY(add_point(l, g, p->at));
    while (away < FARTHEST) {
        away = away < 16 * p->width ? away + 0.25 * p->width : away < 1e5 * p->width ? away * (1 + 1.0 / 64) : away * 2;
        LM_TRY(add_point(l, g, p->at - away));
        LM_TRY(add_point(l, g, p->at + away));
    }
    return settle_grid(l, g);
}

/* The smallest of doubling distances at which the density has fallen on either side. */
static lm_status find_width(const law *l, double at, double value, double *out)
{
    enum { FIRST = -1022, COUNT = 2046 };
    double room = fmin(fmin(at - l->support.low, l->support.high - at), FARTHEST);
    double *x = lm_allocate(2 * COUNT, 2 * sizeof *x);
    if (x == NULL)
        return LM_NO_MEMORY;
    for (int k = 0; k < COUNT; k++) {
        x[2 * k] = at - ldexp(1, FIRST + k);
        x[2 * k + 1] = at + ldexp(1, FIRST + k);
    }
    bool ok = evaluate(l, x, x + 2 * COUNT, 2 * COUNT);
    *out = room;
    for (int k = 0; ok && k < COUNT; k++)
        if (x[2 * COUNT + 2 * k] < value - 0.5 || x[2 * COUNT + 2 * k + 1] < value - 0.5) {
            *out = fmin(ldexp(1, FIRST + k), room);
            break;
        }
    *out = fmax(*out, fmax(4 * DBL_EPSILON * fabs(at), 0x1p-1000));
    lm_release(x);
    return ok ? LM_OK : LM_CALLBACK;
}

/* The highest point between low and high, near one already found. */
static lm_status climb(const law *l, double low, double high, double *at, double *value)
{
    enum { INNER = 31, ROUNDS = 24 };
    for (int round = 0; round < ROUNDS; round++) {
        double x[INNER + 2], v[INNER + 2];
        bool far = (low > 0 && high > 4 * low) || (high < 0 && low < 4 * high);
        for (int i = 0; i < INNER + 2; i++) {
            double part = (double)i / (INNER + 1);
            x[i] = far ? copysign(exp(log(fabs(low)) * (1 - part) + log(fabs(high)) * part), low)
                       : low + (high - low) * part;
        }
        x[0] = low;
        x[INNER + 1] = high;
        if (!evaluate(l, x, v, INNER + 2))
            return LM_CALLBACK;
        int best = -1;
        for (int i = 1; i <= INNER; i++)
            if (v[i] > *value || (best >= 0 && v[i] > v[best])) {
                best = i;
                *value = v[i];
                *at = x[i];
            }
        double inner_low = low, inner_high = high;
        for (int i = 0; i < INNER + 2; i++) {
            if (x[i] < *at)
                inner_low = fmax(inner_low, x[i]);
            if (x[i] > *at)
                inner_high = fmin(inner_high, x[i]);
        }
        low = inner_low;
        high = inner_high;
        if (!isfinite(*value) || high - low <= 1e-9 * fmax(fabs(low), fabs(high)))
            break;
    }
    return LM_OK;
}

static lm_status add_place(law *l, double at, double value)
{
    place p = {.at = at};
    if (l->places == MOST_PLACES || value == -INFINITY)
        return LM_OK;
    LM_TRY(find_width(l, at, value, &p.width));
    p.log_bulk = value + log(p.width);
    for (size_t k = 0; k < l->places; k++)
        if (fabs(l->place[k].at - at) <= 1e-3 * fmin(l->place[k].width, p.width))
            return LM_OK;
    l->place[l->places++] = p;
    return LM_OK;
}

/* Peaks of a grid, the highest point of each found; and the point that stands for most mass, as a law that falls from
 * its edge has no peak. */
static lm_status take_peaks(law *l, const grid *g, bool bulk)
{
    size_t heaviest = 0;
    double most = -INFINITY;
    for (size_t i = 1; bulk && i + 1 < g->count; i++) {
        double mass = g->value[i] + log(g->x[i + 1] - g->x[i - 1]);
        l->infinite |= g->value[i] == INFINITY;
        if (isfinite(mass) && mass > most) {
            most = mass;
            heaviest = i;
        }
    }
    if (heaviest > 0)
        LM_TRY(add_place(l, g->x[heaviest], g->value[heaviest]));
    for (size_t i = 1; i + 1 < g->count;) {
        size_t last = i;
        while (last + 2 < g->count && g->value[last + 1] == g->value[i])
            last++;
        if (g->value[i] > g->value[i - 1] && g->value[i] > g->value[last + 1]) {
            double at = g->x[i + (last - i) / 2], value = g->value[i];
            LM_TRY(climb(l, g->x[i - 1], g->x[last + 1], &at, &value));
            if (isfinite(value))
                LM_TRY(add_place(l, at, value));
        }
        i = last + 1;
    }
    return LM_OK;
}

static int by_reading(const void *a, const void *b)
{
    return ascending(&((const place *)a)->at, &((const place *)b)->at);
}

static lm_status find_places(law *l)
{
    for (size_t looked = 0; looked <= l->places; looked++) {
        grid g = {0};
        lm_status status = looked == 0 ? first_grid(l, &g) : grid_around(l, &l->place[looked - 1], &g);
        if (status == LM_OK)
            status = take_peaks(l, &g, looked == 0);
        lm_release(g.x);
        lm_release(g.value);
        LM_TRY(status);
    }
    double best = -INFINITY;
    for (size_t k = 0; k < l->places; k++)
        best = fmax(best, l->place[k].log_bulk);
    size_t kept = 0;
    for (size_t k = 0; k < l->places; k++) /* ripples of rounding far out are no places */
        if (l->place[k].log_bulk > best - 100)
            l->place[kept++] = l->place[k];
    l->places = kept;
    if (kept > 1)
        qsort(l->place, kept, sizeof *l->place, by_reading);
    l->scale = INFINITY;
    for (size_t k = 0; k < kept; k++)
        if (l->place[k].log_bulk > best - 20)
            l->scale = fmin(l->scale, l->place[k].width);
    int exponent = 0;
    if (isfinite(l->scale))
        frexp(l->scale, &exponent);
    exponent--; /* frexp counts from 1/2 */
    l->scale = ldexp(1, exponent < -900 ? -900 : exponent > 900 ? 900 : exponent);
    l->log_scale = log(l->scale);
    return LM_OK;
}

/* ---- how much ---- */

static lm_status integrate(const law *l, double low, double high, lm_log_panels *panels)
{
    return lm_log_integrate(evaluate, l, low, high, TABLE_FLOOR, panels);
}

/* Panels from the outermost place outwards, at doubling distances, until nothing is left. */
static lm_status integrate_outwards(law *l, const place *from, int side)
{
    double sign = side == 0 ? -1 : 1, edge = side == 0 ? l->support.low : l->support.high, inner = from->at;
    edge = fmin(fmax(edge, -FARTHEST), FARTHEST);
    double before = INFINITY, ratio = 0;
    bool to_the_end = false;
    for (int k = 0; inner != edge && k < 4096; k++) {
        double outer = from->at + sign * from->width * ldexp(1, k > 2100 ? 2100 : k);
        bool last = !(sign * (edge - outer) > 0);
        outer = last ? edge : outer;
        l->table.log_sum = -INFINITY;
        LM_TRY(integrate(l, fmin(inner, outer), fmax(inner, outer), &l->table));
        double mass = l->table.log_sum;
        if (!last && mass > -INFINITY && before < INFINITY)
            ratio = mass - before;
        inner = outer;
        to_the_end = last;
        if (mass < TABLE_FLOOR && mass <= before && k > 0) {
            ratio = mass > -INFINITY ? ratio : -INFINITY;
            break;
        }
        before = mass;
    }
    bool endless = isinf(side == 0 ? l->support.low : l->support.high);
    l->tail_index[side] = endless && before > -INFINITY ? -ratio / LM_LN2 : INFINITY;
    /* past the largest doubles a power tail goes on as it came */
    l->log_beyond[side] = -INFINITY;
    if (endless && to_the_end && before > -INFINITY)
        l->log_beyond[side] = ratio < 0 ? before + ratio - lm_log1mexp(ratio) : INFINITY;
    return LM_OK;
}

static int by_low(const void *a, const void *b)
{
    return ascending(&((const lm_log_panel *)a)->low, &((const lm_log_panel *)b)->low);
}

static lm_status integrate_between(law *l, const place *a, const place *b)
{
    double middle = 0.5 * a->at + 0.5 * b->at, inner = a->at;
    for (double width = a->width; inner < middle; width *= 2) {
        double outer = fmin(a->at + width, middle);
        LM_TRY(integrate(l, inner, outer, &l->table));
        inner = outer;
    }
    inner = b->at;
    for (double width = b->width; inner > middle; width *= 2) {
        double outer = fmax(b->at - width, middle);
        LM_TRY(integrate(l, outer, inner, &l->table));
        inner = outer;
    }
    return LM_OK;
}

static double far_tail(const law *l, double x, int side);

/* In order, without the rough panels at the ends. */
static void trim_table(law *l)
{
    lm_log_panel *panel = l->table.panel;
    size_t first = 0, last = l->table.count;
    qsort(panel, last, sizeof *panel, by_low);
    while (last > 1 && panel[last - 1].log_mass < TABLE_FLOOR)
        last--;
    while (first + 1 < last && panel[first].log_mass < TABLE_FLOOR)
        first++;
    memmove(panel, panel + first, (last - first) * sizeof *panel);
    l->table.count = last - first;
}

static lm_status find_mass(law *l, lm_fault *fault)
{
    const char *wanted = "a density that integrates to 1 over its support";
    if (l->places == 0)
        return lm_refuse(fault, LM_DOMAIN, "the integral of exp(logpdf)", l->infinite ? INFINITY : 0, -1, wanted);
    LM_TRY(integrate_outwards(l, &l->place[0], 0));
    for (size_t k = 0; k + 1 < l->places; k++)
        LM_TRY(integrate_between(l, &l->place[k], &l->place[k + 1]));
    LM_TRY(integrate_outwards(l, &l->place[l->places - 1], 1));
    trim_table(l);
    size_t n = l->table.count;
    const lm_log_panel *panel = l->table.panel;
    for (int side = 0; side < 2; side++) {
        double end = side == 0 ? panel[0].low : panel[n - 1].high;
        if (l->log_beyond[side] == -INFINITY)
            l->log_beyond[side] = far_tail(l, end, side);
        if (isnan(l->log_beyond[side]))
            return LM_CALLBACK;
    }
    l->below = lm_allocate(n, sizeof *l->below);
    l->above = lm_allocate(n, sizeof *l->above);
    if (l->below == NULL || l->above == NULL)
        return LM_NO_MEMORY;
    double sum = l->log_beyond[0];
    for (size_t i = 0; i < n; i++) {
        l->below[i] = sum;
        sum = lm_log_add(sum, panel[i].log_mass);
    }
    l->log_total = lm_log_add(sum, l->log_beyond[1]);
    if (!(fabs(expm1(l->log_total)) <= 1e-6))
        return lm_refuse(fault, LM_DOMAIN, "the integral of exp(logpdf)", exp(l->log_total), -1, wanted);
    if (l->table.log_error > log(1e-7))
        return lm_refuse(fault, LM_DOMAIN, "the error of the integral of exp(logpdf)", exp(l->table.log_error), -1,
                         "a function smooth enough to be integrated within 1e-7");
    sum = l->log_beyond[1];
    for (size_t i = n; i-- > 0;) {
        l->above[i] = sum;
        sum = lm_log_add(sum, panel[i].log_mass);
    }
    return LM_OK;
}

/* ---- moments ---- */

typedef struct {
    const law *l;
    double centre;
    int power;
} moment;

static bool times_distance(const void *context, const double x[], double out[], size_t n)
{
    const moment *m = context;
    if (!evaluate(m->l, x, out, n))
        return false;
    for (size_t i = 0; i < n; i++)
        out[i] += m->power * log(fabs(x[i] - m->centre));
    return true;
}

/* Log of the integral of |x - centre|^power times the density on one side of the centre, the rest of a power tail
 * included. */
static lm_status one_sided(const law *l, double centre, int power, int side, double *out)
{
    moment m = {l, centre, power};
    double sum = -INFINITY, error;
    for (size_t i = 0; i < l->table.count; i++) {
        double low = l->table.panel[i].low, high = l->table.panel[i].high, part;
        low = side == 1 ? fmax(low, centre) : low;
        high = side == 0 ? fmin(high, centre) : high;
        if (!(low < high))
            continue;
        if (!lm_log_rule(times_distance, &m, low, high, &part, &error))
            return LM_CALLBACK;
        sum = lm_log_add(sum, part);
    }
    double end = side == 0 ? l->table.panel[0].low : l->table.panel[l->table.count - 1].high;
    double index = l->tail_index[side];
    if (isfinite(index) && l->log_beyond[side] > -INFINITY)
        sum = lm_log_add(sum, l->log_beyond[side] + power * log(fabs(end - centre)) - log1p(-power / index));
    *out = sum - l->log_total;
    return LM_OK;
}

/* A tail whose index is 1 or 2 has no such moment; the index is known to about 1e-9. */
static bool has_moment(const law *l, int side, int power)
{
    return l->tail_index[side] > power * (1 + 1e-6);
}

static lm_status find_moments(law *l)
{
    bool low = has_moment(l, 0, 1), high = has_moment(l, 1, 1);
    l->mean = low ? INFINITY : high ? -INFINITY : NAN;
    l->variance = low && high ? INFINITY : NAN;
    if (!low || !high)
        return LM_OK;
    double part[2], heaviest = l->place[0].log_bulk, centre = l->place[0].at;
    for (size_t k = 1; k < l->places; k++)
        if (l->place[k].log_bulk > heaviest) {
            heaviest = l->place[k].log_bulk;
            centre = l->place[k].at;
        }
    LM_TRY(one_sided(l, centre, 1, 0, &part[0]));
    LM_TRY(one_sided(l, centre, 1, 1, &part[1]));
    l->mean = centre + (exp(part[1]) - exp(part[0]));
    if (!has_moment(l, 0, 2) || !has_moment(l, 1, 2))
        return LM_OK;
    LM_TRY(one_sided(l, l->mean, 2, 0, &part[0]));
    LM_TRY(one_sided(l, l->mean, 2, 1, &part[1]));
    l->variance = exp(lm_log_add(part[0], part[1]));
    return LM_OK;
}

/* ---- tails ---- */

/* Log mass beyond a reading outside the table, or at its end; not yet divided by the total. */
static double far_tail(const law *l, double x, int side)
{
    double sign = side == 0 ? -1 : 1, edge = side == 0 ? l->support.low : l->support.high, start;
    edge = fmin(fmax(edge, -FARTHEST), FARTHEST);
    double room = fabs(edge - x), width = fmin(fmax(fabs(x) * 0x1p-10, l->scale), 0.5 * room);
    if (!evaluate(l, &x, &start, 1))
        return NAN;
    if (start == -INFINITY || !(room > 0))
        return -INFINITY;
    for (int k = 0; k < 1100; k++) { /* a width over which it falls noticeably, and not to nothing */
        double at = x + sign * width, value;
        if (!evaluate(l, &at, &value, 1))
            return NAN;
        if (start - value > 4 && at != x)
            width *= 0.25;
        else if (start - value < 0.25 && 2 * width < room)
            width *= 2;
        else
            break;
    }
    double total = -INFINITY, inner = x;
    for (int k = 0; k < 2100 && inner != edge; k++) {
        double outer = x + sign * width * ldexp(1, k < 1020 ? k : 1020);
        outer = sign * (edge - outer) > 0 ? outer : edge;
        lm_log_panels panels = LM_NO_PANELS;
        panels.most = 200;
        panels.sum_only = true;
        lm_status status = lm_log_integrate(evaluate, l, fmin(inner, outer), fmax(inner, outer),
                                            fmax(total, start + log(width) - 5) - 45, &panels);
        if (status != LM_OK)
            return NAN;
        total = lm_log_add(total, panels.log_sum);
        if (panels.log_sum < total - 42)
            break;
        inner = outer;
        if (inner == edge && fabs(edge) == FARTHEST && l->tail_index[side] > 0 && isfinite(l->tail_index[side])) {
            double value; /* past the largest doubles a power tail goes on as it came */
            if (!evaluate(l, &edge, &value, 1))
                return NAN;
            total = lm_log_add(total, value + log(FARTHEST) - log(l->tail_index[side]));
        }
    }
    return total;
}

static size_t panel_of(const law *l, double x)
{
    size_t low = 0, high = l->table.count;
    while (high - low > 1) {
        size_t middle = (low + high) / 2;
        if (x >= l->table.panel[middle].low)
            low = middle;
        else
            high = middle;
    }
    return low;
}

/* Part of a panel, in one rule. */
static double part(const law *l, double low, double high)
{
    double log_mass, error;
    if (!(low < high))
        return -INFINITY;
    return lm_log_rule(evaluate, l, low, high, &log_mass, &error) ? log_mass : NAN;
}

/* log P(X <= x) for side 0, log P(X > x) for side 1. */
static double log_tail(const law *l, double x, int side)
{
    const lm_log_panel *panel = l->table.panel;
    size_t n = l->table.count;
    if (x <= l->support.low)
        return side == 0 ? -INFINITY : 0;
    if (x >= l->support.high)
        return side == 0 ? 0 : -INFINITY;
    int near = x < panel[0].low ? 0 : x > panel[n - 1].high ? 1 : -1;
    double mass;
    if (near >= 0) {
        double end = near == 0 ? panel[0].low : panel[n - 1].high;
        mass = fabs(end) >= FARTHEST ? l->log_beyond[near] - l->tail_index[near] * log(fabs(x / end))
                                     : far_tail(l, x, near);
    } else {
        size_t i = panel_of(l, x);
        near = l->below[i] < l->above[i] ? 0 : 1;
        mass = near == 0 ? lm_log_add(l->below[i], part(l, panel[i].low, x))
                         : lm_log_add(part(l, x, panel[i].high), l->above[i]);
    }
    mass = fmin(mass - l->log_total, 0) + (isnan(mass) ? NAN : 0);
    return near == side ? mass : lm_log1mexp(mass);
}

/* ---- the table ---- */

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    const law *l = of(term);
    double x[BLOCK];
    for (size_t start = 0; start < n; start += BLOCK) {
        size_t m = n - start < BLOCK ? n - start : BLOCK;
        for (size_t i = 0; i < m; i++)
            x[i] = y[start + i] * l->scale;
        bool ok = evaluate(l, x, out + start, m);
        for (size_t i = start; i < start + m; i++)
            out[i] = ok ? out[i] + l->log_scale : NAN;
        if (!ok)
            return;
    }
}

static double log_cdf(const lm_term *term, double y)
{
    return log_tail(of(term), y * of(term)->scale, 0);
}

static double log_sf(const lm_term *term, double y)
{
    return log_tail(of(term), y * of(term)->scale, 1);
}

/* Inside the table the panels in between are added, where the tails would cancel. */
static double log_mass(const lm_term *term, double y_low, double y_high)
{
    const law *l = of(term);
    const lm_log_panel *panel = l->table.panel;
    double low = y_low * l->scale, high = y_high * l->scale;
    double below = log_tail(l, low, 0), beyond = log_tail(l, high, 1), less = fmin(below, beyond);
    double more = below < beyond ? log_tail(l, high, 0) : log_tail(l, low, 1);
    if (low < panel[0].low || high > panel[l->table.count - 1].high || more - less > 0.1 || isnan(more + less))
        return isnan(below + beyond + more) ? NAN : lm_log_sub(more, less);
    double sum = -INFINITY;
    for (size_t i = panel_of(l, low); i < l->table.count && panel[i].low < high; i++) {
        bool whole = panel[i].low >= low && panel[i].high <= high;
        sum = lm_log_add(sum, whole ? panel[i].log_mass : part(l, fmax(low, panel[i].low), fmin(high, panel[i].high)));
    }
    return sum - l->log_total;
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    const law *l = of(term);
    *mean = l->mean / l->scale;
    *variance = l->variance / l->scale / l->scale;
}

static lm_range support(const lm_term *term)
{
    const law *l = of(term);
    return (lm_range){l->support.low / l->scale, l->support.high / l->scale};
}

static size_t landmarks(const lm_term *term, double out[], size_t capacity)
{
    const law *l = of(term);
    for (size_t k = 0; k < l->marks && k < capacity; k++)
        out[k] = l->mark[k] / l->scale;
    return l->marks;
}

/* Modes, the middles between them, and readings around them: the search for levels samples between landmarks, so they
 * are what makes it fine where the law is. */
static void set_landmarks(law *l)
{
    static const double away[MARKS_EACH / 2] = {4, 32, 256};
    for (size_t k = 0; k < l->places; k++) {
        const place *p = &l->place[k];
        double low = k > 0 ? 0.5 * l->place[k - 1].at + 0.5 * p->at : l->support.low;
        double high = k + 1 < l->places ? 0.5 * p->at + 0.5 * l->place[k + 1].at : l->support.high;
        for (int i = MARKS_EACH / 2; i-- > 0;)
            if (p->at - away[i] * p->width > low)
                l->mark[l->marks++] = p->at - away[i] * p->width;
        l->mark[l->marks++] = p->at;
        for (int i = 0; i < MARKS_EACH / 2; i++)
            if (p->at + away[i] * p->width < high)
                l->mark[l->marks++] = p->at + away[i] * p->width;
        if (k + 1 < l->places)
            l->mark[l->marks++] = high;
    }
}

static void destroy(lm_shared *shared)
{
    law *l = (law *)(void *)shared;
    if (l->release != NULL)
        l->release(l->context);
    lm_log_panels_free(&l->table);
    lm_release(l->below);
    lm_release(l->above);
    lm_release(l);
}

const lm_family lm_family_custom = {
    .name = "custom",
    .fallible = true,
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .log_mass = log_mass,
    .moments = moments,
    .support = support,
    .landmarks = landmarks,
};

lm_status lm_density_custom(lm_log_pdf_callback log_pdf_of, void *context, void (*release)(void *), lm_range over,
                            lm_density **out, lm_fault *fault)
{
    law *l = lm_allocate_zeroed(1, sizeof *l);
    if (l == NULL) {
        if (release != NULL)
            release(context);
        return LM_NO_MEMORY;
    }
    atomic_init(&l->shared.references, 1);
    l->shared.destroy = destroy;
    l->call = log_pdf_of;
    l->context = context;
    l->release = release;
    l->support = over;
    l->table = LM_NO_PANELS;
    lm_status status = LM_OK;
    if (!(over.low < over.high) || over.low == INFINITY || over.high == -INFINITY)
        status = lm_refuse(fault, LM_DOMAIN, "support", over.low < over.high ? over.low : over.high, -1,
                           "two numbers, the lower first");
    if (status == LM_OK)
        status = find_continuations(l);
    if (status == LM_OK)
        status = find_places(l);
    if (status == LM_OK)
        status = find_mass(l, fault);
    if (status == LM_OK)
        status = find_moments(l);
    if (status != LM_OK) {
        destroy(&l->shared);
        return status;
    }
    set_landmarks(l);
    lm_term term = {.family = &lm_family_custom, .scale = 1, .data = &l->shared};
    term.scale = l->scale;
    return lm_density_of_term(&term, out);
}
