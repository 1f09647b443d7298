/* The density of recorded readings: where its knots are laid, which of them stay, and how its tails are joined.
 *
 * Knots are laid at quantiles, half of them at even steps of probability and half at even steps of its logit (closer
 * towards the tails), as long as enough readings lie between; a piece may be four times as long as its neighbour. Then
 * one knot after another is taken away, each time the one that the likelihood misses least: an inner knot by Wald's
 * statistic (C. J. Stone, M. H. Hansen, C. Kooperberg, Y. K. Truong, Ann. Statist. 25, 1997, 1371-1470), or an outer
 * one, which moves a threshold inward and gives its piece to the generalized Pareto tail. Of all the laws on the way
 * the one with the least Bayes information criterion (G. Schwarz, Ann. Statist. 6, 1978, 461-464) stays: this chooses
 * the thresholds too, since body and tails share one likelihood.
 */
#include <float.h>
#include <math.h>
#include <string.h>

#include "../numeric/fault.h"
#include "../numeric/memory.h"
#include "cells.h"
#include "log_spline.h"
#include "pareto.h"

enum {
    LEAST_READINGS = 20,
    LEAST_DISTINCT = 3,
    LEAST_TAIL = 12, /* fewer readings say next to nothing about the shape of a tail: its error would be 0.3 and more */
    FEW = 3,         /* and of so few the shape is not asked at all */
    QUANTILES = 30,  /* knots of each kind that are laid first */
    LAID = 120,      /* knots in all */
    RANKS = 512,     /* the tail's likelihood sees the reading of rank r together with at most r / RANKS others */
    JOINS = 100,     /* rounds in which body and tails are fitted to each other */
};

static const double longest_step = 4;  /* of a piece over its neighbour */
static const double widest_tail = 0.25; /* probability: what lies further in is body */

static const double widest_ratio = 1e100; /* of two pieces: its cube, for a third derivative, stays a double */

/* A law of shape 2 gives 1 in 100 of its readings beyond 1e4 scales already. One reading at 1e300 among thousands would
 * ask for a shape of 20, and call every tenth of those that follow it in rank a wild one. */
static const double largest_shape = 2;

/* Readings outside a threshold, from the outermost inward, in groups. */
typedef struct {
    double *place;
    double *times;
    double *excess; /* over the threshold last asked about */
    size_t count;
    size_t beyond[LAID]; /* groups outside each knot */
    lm_pareto_tail tail[LAID];
    bool known[LAID];
} outskirts;

typedef struct {
    lm_cells cells;
    size_t knots;
    double knot[LAID];
    double moment[LAID][4]; /* of the pieces between them */
    outskirts out[2];
} recording;

/* Some of the knots, and the law on them. */
typedef struct {
    size_t count;
    size_t knot[LAID];
    lm_pareto_tail tail[2];
    double log_likelihood; /* of everything */
    lm_log_spline spline;
    lm_spline_readings data;
} candidate;

/* ---- where knots are laid ---- */

/* Knots closer than this would come to lie on one another when they are rounded. */
static double closest(double x)
{
    return fmax(32 * DBL_EPSILON * fabs(x), 0x1p-1000);
}

/* The edge of the cell of a value towards the next. */
static double edge_after(const lm_cells *cells, size_t i)
{
    return cells->step > 0 ? cells->value[i] + 0.5 * cells->step : 0.5 * cells->value[i] + 0.5 * cells->value[i + 1];
}

static size_t first_at_least(const double sum[], size_t count, double wanted)
{
    size_t low = 0, high = count;
    while (low < high) {
        size_t middle = (low + high) / 2;
        if (sum[middle] >= wanted)
            high = middle;
        else
            low = middle + 1;
    }
    return low;
}

static void insert(recording *r, size_t at, double x)
{
    memmove(r->knot + at + 1, r->knot + at, (r->knots - at) * sizeof *r->knot);
    r->knot[at] = x;
    r->knots++;
}

/* Splits pieces much longer than a neighbour, so that a cubic can go from a narrow peak into a wide gap. */
static void grade(recording *r)
{
    const lm_cells *cells = &r->cells;
    for (size_t i = 0; i + 1 < r->knots && r->knots < LAID;) {
        double own = r->knot[i + 1] - r->knot[i];
        double left = i > 0 ? r->knot[i] - r->knot[i - 1] : own;
        double right = i + 2 < r->knots ? r->knot[i + 2] - r->knot[i + 1] : own;
        double longest = longest_step * fmin(left, right), part = fmin(longest, 0.5 * own);
        if (own <= longest * (1 + 4 * DBL_EPSILON)) {
            i++;
            continue;
        }
        double x = left < right ? r->knot[i] + part : r->knot[i + 1] - part;
        if (cells->step > 0) { /* on an edge of a cell */
            double origin = edge_after(cells, 0);
            x = origin + cells->step * round((x - origin) / cells->step);
        }
        if (!(x > r->knot[i] + closest(x) && x < r->knot[i + 1] - closest(x))) {
            i++;
            continue;
        }
        insert(r, i + 1, x);
        i = i > 0 ? i - 1 : 0; /* its neighbour may now be too long */
    }
}

/* sum: readings up to each distinct value. */
static lm_status lay_knots(recording *r, const double sum[], lm_fault *fault)
{
    const lm_cells *cells = &r->cells;
    double n = cells->total, between = ceil(pow(n, 0.4)), tail = fmax(between, fmin(LEAST_TAIL, floor(n / 8)));
    size_t edges = cells->count - 1, first = first_at_least(sum, edges, tail);
    size_t last = first_at_least(sum, edges, n - tail + 0.5); /* the first edge with too few readings above */
    last = last > 0 ? last - 1 : 0;
    if (first >= last) { /* nearly all readings in one cell: the outermost cells are the tails */
        first = 0;
        last = edges - 1;
    }
    double low = sum[first] / n, high = sum[last] / n, even = 1.0 / QUANTILES, bent = 0;
    double logit_low = log(low / (1 - low)), logit_step = (log(high / (1 - high)) - logit_low) / (QUANTILES - 1);
    size_t at = first, bend = 0;
    r->knot[r->knots++] = edge_after(cells, first);
    for (size_t step = 1; step < QUANTILES || bend < QUANTILES;) {
        even = step < QUANTILES ? (double)step / QUANTILES : INFINITY;
        bent = bend < QUANTILES ? 1 / (1 + exp(-logit_low - logit_step * (double)bend)) : INFINITY;
        double p = fmin(even, bent);
        if (even <= bent)
            step++;
        else
            bend++;
        if (!(p < high))
            continue;
        size_t i = first_at_least(sum, edges, p * n);
        double x = i < last ? edge_after(cells, i) : 0;
        if (i > at && i < last && sum[i] - sum[at] >= between && sum[last] - sum[i] >= between &&
            x > r->knot[r->knots - 1] + closest(x) && x < edge_after(cells, last) - closest(x)) {
            r->knot[r->knots++] = x;
            at = i;
        }
    }
    r->knot[r->knots++] = edge_after(cells, last);
    double length = edge_after(cells, last) - edge_after(cells, first);
    if (!(length > closest(edge_after(cells, last)) && length > closest(edge_after(cells, first))))
        return lm_refuse(fault, LM_DOMAIN, "readings", length, -1, "readings further apart than doubles round");
    grade(r);
    double narrow = INFINITY, wide = 0;
    for (size_t i = 0; i + 1 < r->knots; i++) {
        narrow = fmin(narrow, r->knot[i + 1] - r->knot[i]);
        wide = fmax(wide, r->knot[i + 1] - r->knot[i]);
    }
    if (!(wide / narrow < widest_ratio))
        return lm_refuse(fault, LM_DOMAIN, "readings", wide / narrow, -1,
                         "readings that spread over fewer powers of ten (fit their logarithms)");
    return LM_OK;
}

/* ---- what the likelihood needs of the readings ---- */

static void find_moments(recording *r)
{
    const lm_cells *cells = &r->cells;
    size_t piece = 0;
    for (size_t i = 0; i < cells->count; i++) {
        double x = cells->value[i], times = cells->times[i];
        if (x < r->knot[0])
            continue;
        while (piece + 1 < r->knots && x >= r->knot[piece + 1])
            piece++;
        if (piece + 1 == r->knots)
            break;
        double h = r->knot[piece + 1] - r->knot[piece], t = (x - r->knot[piece]) / h, half = 0.5 * cells->step / h;
        double *m = r->moment[piece];
        m[0] += times;
        m[1] += times * t;
        m[2] += times * (t * t + half * half / 3); /* means over the cell t - half .. t + half */
        m[3] += times * t * (t * t + half * half);
    }
}

/* Groups the readings of one side. Groups end at knots. */
static lm_status find_outskirts(recording *r, int side)
{
    const lm_cells *cells = &r->cells;
    outskirts *o = &r->out[side];
    size_t room = 0, knot = side == 0 ? 0 : r->knots - 1, i = 0;
    double most = widest_tail * cells->total, sum = 0;
    for (int pass = 0; pass < 2; pass++) { /* the first to count */
        if (pass == 1) {
            o->place = lm_allocate(room, sizeof(double));
            o->times = lm_allocate(room, sizeof(double));
            o->excess = lm_allocate(room, sizeof(double));
            if (o->place == NULL || o->times == NULL || o->excess == NULL)
                return LM_NO_MEMORY;
        }
        bool open = false; /* a group that may still grow */
        size_t groups = 0;
        knot = side == 0 ? 0 : r->knots - 1;
        sum = 0;
        for (i = 0; i < cells->count; i++) {
            size_t at = side == 0 ? i : cells->count - 1 - i;
            double x = cells->value[at], times = cells->times[at];
            bool passed = false;
            while (side == 0 ? x > r->knot[knot] : x < r->knot[knot]) {
                passed = true;
                o->beyond[knot] = groups;
                if ((side == 0 ? knot + 1 == r->knots : knot == 0) || sum > most)
                    goto counted;
                knot = side == 0 ? knot + 1 : knot - 1;
            }
            sum += times;
            if (pass == 0) { /* room for every distinct value while groups are short, few after */
                groups++;
                continue;
            }
            double limit = sum / RANKS;
            if (open && !passed && o->times[groups - 1] + times <= limit) {
                double all = o->times[groups - 1] + times;
                o->place[groups - 1] += (x - o->place[groups - 1]) * (times / all);
                o->times[groups - 1] = all;
            } else {
                o->place[groups] = x;
                o->times[groups++] = times;
            }
            open = true;
        }
    counted:
        room = groups;
    }
    o->count = room;
    return LM_OK;
}

static lm_excesses excesses(recording *r, int side, size_t knot)
{
    outskirts *o = &r->out[side];
    for (size_t i = 0; i < o->beyond[knot]; i++)
        o->excess[i] = fabs(o->place[i] - r->knot[knot]);
    return (lm_excesses){o->excess, o->times, o->beyond[knot]};
}

/* So few readings say nothing about the shape of their tail. */
static double shape_limit(double readings)
{
    return readings < FEW ? 0 : largest_shape;
}

/* The generalized Pareto law by itself beyond a knot. */
static const lm_pareto_tail *tail_at(recording *r, int side, size_t knot)
{
    outskirts *o = &r->out[side];
    if (!o->known[knot]) {
        lm_excesses data = excesses(r, side, knot);
        double count = 0;
        for (size_t i = 0; i < data.count; i++)
            count += data.times[i];
        o->tail[knot] = lm_pareto_join(&data, 0, 1, count, shape_limit(count));
        o->known[knot] = true;
    }
    return &o->tail[knot];
}

static double tail_shape_likelihood(const lm_pareto_tail *tail)
{
    return tail->log_likelihood + tail->readings * log(tail->scale);
}

/* ---- one law ---- */

/* Gathers what a candidate's likelihood needs: moments of its pieces from those that were laid. */
static void gather(recording *r, candidate *c)
{
    lm_spline_readings *d = &c->data;
    d->pieces = c->count - 1;
    d->total = r->cells.total;
    memset(d->moment, 0, sizeof d->moment);
    for (size_t i = 0; i < c->count; i++)
        d->knot[i] = r->knot[c->knot[i]];
    for (size_t i = 0; i < d->pieces; i++) {
        double start = d->knot[i], h = d->knot[i + 1] - start, *sum = d->moment[i];
        for (size_t k = c->knot[i]; k < c->knot[i + 1]; k++) { /* t = shift + scale * (t on the laid piece) */
            double a = (r->knot[k] - start) / h, b = (r->knot[k + 1] - r->knot[k]) / h;
            const double *m = r->moment[k];
            sum[0] += m[0];
            sum[1] += a * m[0] + b * m[1];
            sum[2] += a * a * m[0] + 2 * a * b * m[1] + b * b * m[2];
            sum[3] += a * a * a * m[0] + 3 * a * a * b * m[1] + 3 * a * b * b * m[2] + b * b * b * m[3];
        }
    }
    for (int side = 0; side < 2; side++) {
        c->tail[side] = *tail_at(r, side, c->knot[side == 0 ? 0 : c->count - 1]);
        d->beyond[side] = c->tail[side].readings;
        d->tail_scale[side] = c->tail[side].scale;
    }
    lm_log_spline_lay(&c->spline, d->knot, d->pieces);
}

static void climb(candidate *c)
{
    lm_log_spline_climb(&c->spline, &c->data);
    c->log_likelihood =
        c->spline.log_likelihood + tail_shape_likelihood(&c->tail[0]) + tail_shape_likelihood(&c->tail[1]);
}

/* The law without one knot of another. */
static void without(recording *r, const candidate *from, size_t gone, candidate *c)
{
    c->count = from->count - 1;
    memcpy(c->knot, from->knot, gone * sizeof *c->knot);
    memcpy(c->knot + gone, from->knot + gone + 1, (from->count - gone - 1) * sizeof *c->knot);
    gather(r, c);
    lm_log_spline_follow(&c->spline, &from->spline);
    climb(c);
}

/* A tail may begin where the body falls towards it; else its threshold would be a peak of its own. */
static bool falls_outward(const candidate *c, int side)
{
    const double *theta = c->spline.theta, *last = theta + c->spline.pieces + 2;
    return side == 0 ? theta[0] <= theta[1] : last[0] <= last[-1];
}

static double criterion(const candidate *c)
{
    return -2 * c->log_likelihood + (double)c->count * log(c->data.total); /* all else counts alike */
}

enum { CURRENT, SPARE, LEFT, RIGHT, BEST, CANDIDATES };

/* Takes knots away one by one; returns the best law on the way. */
static candidate *prune(recording *r, candidate *c[CANDIDATES])
{
    candidate *start = c[CURRENT];
    start->count = r->knots;
    for (size_t i = 0; i < r->knots; i++)
        start->knot[i] = i;
    gather(r, start);
    lm_log_spline_start(&start->spline, &start->data);
    climb(start);
    *c[BEST] = *start;
    while (c[CURRENT]->count > 2) {
        const candidate *now = c[CURRENT];
        double least = INFINITY;
        size_t inner = 0;
        int next = SPARE;
        for (size_t i = 1; i + 1 < now->count; i++) {
            double worth = lm_log_spline_worth(&now->spline, i, now->data.total);
            if (worth < least) {
                least = worth;
                inner = i;
            }
        }
        for (int side = 0; side < 2; side++) {
            size_t end = side == 0 ? 1 : now->count - 2;
            if (r->out[side].beyond[now->knot[end]] == 0 ||
                tail_at(r, side, now->knot[end])->readings > widest_tail * now->data.total)
                continue;
            candidate *moved = c[side == 0 ? LEFT : RIGHT];
            without(r, now, side == 0 ? 0 : now->count - 1, moved);
            double loss = 2 * (now->log_likelihood - moved->log_likelihood);
            if (loss < least && falls_outward(moved, side)) {
                least = loss;
                next = side == 0 ? LEFT : RIGHT;
            }
        }
        if (next == SPARE)
            without(r, now, inner, c[SPARE]);
        candidate *chosen = c[next];
        c[next] = c[CURRENT];
        c[CURRENT] = chosen;
        if (criterion(chosen) < criterion(c[BEST]))
            *c[BEST] = *chosen;
    }
    return c[BEST];
}

/* Fits body and tails to each other until the likelihood of the whole stands still. */
static void join(recording *r, candidate *c)
{
    for (int round = 0; round < JOINS; round++) {
        double before = c->log_likelihood;
        const lm_log_spline *s = &c->spline;
        double edge[2] = {exp(s->theta[0] - s->log_norm), exp(s->theta[s->pieces + 2] - s->log_norm)};
        double mass = 1; /* of everything; one tail's part changes before the other is looked at */
        for (int side = 0; side < 2; side++) {
            lm_excesses data = excesses(r, side, c->knot[side == 0 ? 0 : c->count - 1]);
            double rest = fmax(mass - edge[side] * c->tail[side].scale, 0);
            c->tail[side] = lm_pareto_join(&data, rest, edge[side], c->data.total + lm_log_spline_spread,
                                           shape_limit(c->tail[side].readings));
            c->data.tail_scale[side] = c->tail[side].scale;
            mass = rest + edge[side] * c->tail[side].scale;
        }
        climb(c);
        if (!(c->log_likelihood > before + 1e-6)) /* nothing that 1 / (readings) of a standard error would notice */
            break;
    }
}

static lm_status give(const recording *r, const candidate *c, lm_density **out, lm_fault *fault)
{
    double value[LAID], slope[LAID];
    for (size_t i = 0; i < c->count; i++) {
        double p[4], h = 0;
        size_t piece = i < c->spline.pieces ? i : i - 1;
        lm_log_spline_piece(&c->spline, piece, p);
        h = c->spline.knot[piece + 1] - c->spline.knot[piece];
        value[i] = (i == piece ? p[0] : p[0] + p[1] + p[2] + p[3]) - c->spline.log_norm;
        slope[i] = (i == piece ? p[1] : p[1] + 2 * p[2] + 3 * p[3]) / h;
    }
    lm_spline_law law = {.knots = c->count,
                         .knot = c->spline.knot,
                         .log_density = value,
                         .slope = slope,
                         .readings = r->cells.total,
                         .step = r->cells.step};
    for (int side = 0; side < 2; side++) {
        law.tail_scale[side] = c->tail[side].scale;
        law.tail_shape[side] = c->tail[side].shape;
        law.tail_readings[side] = c->tail[side].readings;
        law.tail_shape_error[side] = c->tail[side].shape_error;
    }
    return lm_density_spline(&law, out, fault);
}

lm_status lm_density_from_readings(const double readings[], size_t n, lm_density **out, lm_fault *fault)
{
    if (n < LEAST_READINGS)
        return lm_refuse(fault, LM_SIZE, "readings", (double)n, -1, "at least 20 readings");
    lm_status status = LM_NO_MEMORY;
    double *sum = NULL;
    candidate *c[CANDIDATES] = {NULL};
    recording *r = lm_allocate_zeroed(1, sizeof *r);
    if (r == NULL)
        return LM_NO_MEMORY;
    status = lm_cells_make(readings, n, &r->cells, fault);
    if (status != LM_OK) {
        lm_release(r);
        return status;
    }
    if (r->cells.count < LEAST_DISTINCT) {
        status = lm_refuse(fault, LM_SIZE, "readings", (double)r->cells.count, -1, "at least 3 distinct readings");
        goto done;
    }
    status = LM_NO_MEMORY;
    sum = lm_allocate(r->cells.count, sizeof *sum);
    for (int i = 0; i < CANDIDATES; i++)
        if ((c[i] = lm_allocate_zeroed(1, sizeof *c[i])) == NULL)
            goto done;
    if (sum == NULL)
        goto done;
    for (size_t i = 0; i < r->cells.count; i++)
        sum[i] = r->cells.times[i] + (i > 0 ? sum[i - 1] : 0);
    if ((status = lay_knots(r, sum, fault)) != LM_OK)
        goto done;
    find_moments(r);
    for (int side = 0; side < 2; side++)
        if ((status = find_outskirts(r, side)) != LM_OK)
            goto done;
    candidate *best = prune(r, c);
    join(r, best);
    status = give(r, best, out, fault);
done:
    for (int i = 0; i < CANDIDATES; i++)
        lm_release(c[i]);
    for (int side = 0; side < 2; side++) {
        lm_release(r->out[side].place);
        lm_release(r->out[side].times);
        lm_release(r->out[side].excess);
    }
    lm_release(sum);
    lm_cells_free(&r->cells);
    lm_release(r);
    return status;
}
