/* The law fitted to recordings: exp(piecewise cubic) between two thresholds, a generalized Pareto tail beyond each.
 *
 * The standard law counts from the knot nearest 0, in a power of two near the narrowest piece, so that knots many
 * decades apart stay apart. Masses of the body come from Gauss-Legendre quadrature on panels over which the log density
 * varies by 1 at most, where 16 nodes are exact to rounding; a panel's part is then one more such sum.
 */
#include <float.h>
#include <math.h>
#include <string.h>

#include "../numeric/cubic.h"
#include "../numeric/fault.h"
#include "../numeric/logspace.h"
#include "../numeric/memory.h"
#include "family.h"

typedef struct {
    double threshold, scale, shape;
    double log_edge; /* log density at the threshold */
    double log_mass;
} tail;

/* t0 to t1 of a piece; probabilities of all below it and of all above it. */
typedef struct {
    size_t piece;
    double t0, t1, below, above;
} panel;

typedef struct {
    lm_shared shared;
    lm_spline_law law; /* as given; its arrays are `given` */
    double *given;
    double shift, scale;
    size_t pieces;
    double *knot;        /* standard, pieces + 1 */
    double (*cubic)[4]; /* log density on each piece by powers of t, 0 to 1 on it */
    tail tail[2];
    size_t panels, room;
    panel *panel;
    double mean, variance;
} law;

static const law *of(const lm_term *term)
{
    return (const law *)(const void *)term->data;
}

static const double side_sign[2] = {-1, 1};

/* log(1 + shape z / scale), also where z / scale overflows. */
static double log_spread(double z, double scale, double shape)
{
    double q = shape * (z / scale);
    return q <= DBL_MAX ? log1p(q) : log(shape) + log(z) - log(scale);
}

/* log of the density, and of the mass, beyond an excess z >= 0 relative to that at the threshold. */
static double decay(double z, double scale, double shape)
{
    return shape == 0 ? -z / scale : -(1 / shape + 1) * log_spread(z, scale, shape);
}

static double tail_log_sf(const tail *t, double z)
{
    return t->log_mass + (t->shape == 0 ? -z / t->scale : -log_spread(z, t->scale, t->shape) / t->shape);
}

/* ---- pieces and panels ---- */

static size_t piece_of(const law *l, double y)
{
    size_t low = 0, high = l->pieces;
    while (high - low > 1) {
        size_t middle = (low + high) / 2;
        if (y >= l->knot[middle])
            low = middle;
        else
            high = middle;
    }
    return low;
}

static double width(const law *l, size_t piece)
{
    return l->knot[piece + 1] - l->knot[piece];
}

enum { HALF = 8 };

/* Gauss-Legendre with 16 nodes on -1..1; Abramowitz and Stegun 25.4.30. */
static const double node[HALF] = {0.0950125098376374402, 0.281603550779258913, 0.458016777657227386,
                                  0.617876244402643748,  0.755404408355003034, 0.865631202387831744,
                                  0.944575023073232576,  0.989400934991649933};
static const double weight[HALF] = {0.189450610455068496, 0.182603415044923589,  0.169156519395002538,
                                    0.149595988816576732, 0.124628971255533872,  0.0951585116824927848,
                                    0.0622535239386478929, 0.0271524594117540949};

/* Integral of (y - centre)^power times the density over part of a panel. */
static double part(const law *l, size_t piece, double t0, double t1, double centre, int power)
{
    const double *c = l->cubic[piece];
    double middle = 0.5 * (t0 + t1), half = 0.5 * (t1 - t0), sum = 0, h = width(l, piece);
    for (int i = 0; i < HALF; i++)
        for (int sign = -1; sign <= 1; sign += 2) {
            double t = middle + sign * half * node[i], value = weight[i] * exp(lm_cubic(c, t));
            for (int k = 0; k < power; k++)
                value *= l->knot[piece] + t * h - centre;
            sum += value;
        }
    return sum * half * h;
}

/* Splits a piece into panels; what is below `floor` may vary as it likes, since nothing will notice. */
static bool lay_panels(law *l, size_t piece, double t0, double t1, double floor)
{
    lm_range range = lm_cubic_range(l->cubic[piece], t0, t1);
    if (range.high - range.low > 1 && range.high > floor && t1 - t0 > 1e-12) {
        double middle = 0.5 * (t0 + t1);
        return lay_panels(l, piece, t0, middle, floor) && lay_panels(l, piece, middle, t1, floor);
    }
    if (l->panels == l->room) {
        size_t room = 2 * l->room + 64;
        panel *more = lm_reallocate(l->panel, room, sizeof *more);
        if (more == NULL)
            return false;
        l->panel = more;
        l->room = room;
    }
    l->panel[l->panels++] = (panel){piece, t0, t1, 0, 0};
    return true;
}

static double tail_mean(const tail *t, int power) /* of the excess, or of its square */
{
    double xi = t->shape;
    if (power == 1)
        return xi < 1 ? t->scale / (1 - xi) : INFINITY;
    return xi < 0.5 ? 2 * t->scale / (1 - xi) * (t->scale / (1 - 2 * xi)) : INFINITY;
}

static void find_moments(law *l)
{
    double mass[2] = {exp(l->tail[0].log_mass), exp(l->tail[1].log_mass)};
    bool low = isfinite(tail_mean(&l->tail[0], 1)), high = isfinite(tail_mean(&l->tail[1], 1));
    l->variance = low && high ? INFINITY : NAN;
    if (!low || !high) {
        l->mean = low ? INFINITY : high ? -INFINITY : NAN;
        return;
    }
    double mean = 0, variance = 0;
    for (int side = 0; side < 2; side++)
        mean += mass[side] * (l->tail[side].threshold + side_sign[side] * tail_mean(&l->tail[side], 1));
    for (size_t i = 0; i < l->panels; i++)
        mean += part(l, l->panel[i].piece, l->panel[i].t0, l->panel[i].t1, 0, 1);
    for (int side = 0; side < 2; side++) {
        double away = side_sign[side] * (l->tail[side].threshold - mean);
        variance += mass[side] *
                    (away * away + 2 * away * tail_mean(&l->tail[side], 1) + tail_mean(&l->tail[side], 2));
    }
    for (size_t i = 0; i < l->panels; i++)
        variance += part(l, l->panel[i].piece, l->panel[i].t0, l->panel[i].t1, mean, 2);
    l->mean = mean;
    l->variance = variance;
}

/* Panels, normalisation, and the masses below and above each panel. */
static lm_status settle(law *l, lm_fault *fault)
{
    double floor = fmin(l->tail[0].log_mass, l->tail[1].log_mass) - 45, sum = 0;
    for (size_t i = 0; i < l->pieces; i++)
        if (!lay_panels(l, i, 0, 1, floor - log(width(l, i))))
            return LM_NO_MEMORY;
    for (size_t i = 0; i < l->panels; i++) {
        panel *p = &l->panel[i];
        p->below = part(l, p->piece, p->t0, p->t1, 0, 0);
        sum += p->below;
    }
    double log_norm = log(sum + exp(l->tail[0].log_mass) + exp(l->tail[1].log_mass));
    if (!isfinite(log_norm))
        return lm_refuse(fault, LM_DOMAIN, "log_density", log_norm, -1, "a density of finite mass");
    for (size_t i = 0; i < l->pieces; i++)
        l->cubic[i][0] -= log_norm;
    for (int side = 0; side < 2; side++) {
        l->tail[side].log_edge -= log_norm;
        l->tail[side].log_mass -= log_norm;
    }
    double norm = exp(log_norm), below = exp(l->tail[0].log_mass), above = exp(l->tail[1].log_mass);
    for (size_t i = l->panels; i-- > 0;) {
        l->panel[i].above = above;
        above += l->panel[i].below / norm;
    }
    for (size_t i = 0; i < l->panels; i++) {
        double own = l->panel[i].below / norm;
        l->panel[i].below = below;
        below += own;
    }
    find_moments(l);
    return LM_OK;
}

/* ---- the table ---- */

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    const law *l = of(term);
    for (size_t i = 0; i < n; i++) {
        if (y[i] < l->knot[0] || y[i] > l->knot[l->pieces]) {
            const tail *t = &l->tail[y[i] > l->knot[0]];
            out[i] = t->log_edge + decay(fabs(y[i] - t->threshold), t->scale, t->shape);
        } else {
            size_t piece = piece_of(l, y[i]);
            out[i] = lm_cubic(l->cubic[piece], (y[i] - l->knot[piece]) / width(l, piece));
        }
    }
}

/* Probabilities below and above a reading of the body, each summed from its own end. */
static void split(const law *l, double y, double *below, double *above)
{
    size_t piece = piece_of(l, y), low = 0, high = l->panels;
    double t = (y - l->knot[piece]) / width(l, piece);
    while (high - low > 1) {
        size_t middle = (low + high) / 2;
        const panel *p = &l->panel[middle];
        if (p->piece < piece || (p->piece == piece && p->t0 <= t))
            low = middle;
        else
            high = middle;
    }
    const panel *p = &l->panel[low];
    *below = p->below + part(l, p->piece, p->t0, t, 0, 0);
    *above = p->above + part(l, p->piece, t, p->t1, 0, 0);
}

/* log P(Y > y) for the side above, log P(Y <= y) for the side below. */
static double log_tail(const law *l, double y, int side)
{
    const tail *own = &l->tail[side], *other = &l->tail[1 - side];
    double away = side_sign[side] * (y - own->threshold);
    if (away >= 0)
        return tail_log_sf(own, away);
    double back = side_sign[side] * (other->threshold - y);
    if (back >= 0)
        return lm_log1mexp(tail_log_sf(other, back));
    double below, above;
    split(l, y, &below, &above);
    double mass = side == 0 ? below : above, rest = side == 0 ? above : below;
    return mass < rest ? log(mass) : log1p(-rest);
}

static double log_cdf(const lm_term *term, double y)
{
    return log_tail(of(term), y, 0);
}

static double log_sf(const lm_term *term, double y)
{
    return log_tail(of(term), y, 1);
}

/* Between two readings of the body the panels in between are added; elsewhere the smaller tail loses nothing. */
static double log_mass(const lm_term *term, double low, double high)
{
    const law *l = of(term);
    double below = log_tail(l, low, 0), beyond = log_tail(l, high, 1);
    double other = below < beyond ? log_tail(l, high, 0) : log_tail(l, low, 1), less = fmin(below, beyond);
    if (low < l->knot[0] || high > l->knot[l->pieces] || other - less > 0.1) /* at most ten times the rounding */
        return lm_log_sub(other, less);
    double sum = 0;
    for (size_t i = 0; i < l->panels; i++) {
        const panel *p = &l->panel[i];
        double h = width(l, p->piece), from = l->knot[p->piece];
        double t0 = fmax(p->t0, (low - from) / h), t1 = fmin(p->t1, (high - from) / h);
        if (t0 < t1)
            sum += part(l, p->piece, t0, t1, 0, 0);
    }
    return log(sum);
}

/* The reading whose probability from the panel's nearer end is `mass`: Newton's method, kept inside by bisection. */
static double solve(const law *l, const panel *p, double mass, bool from_high)
{
    double low = p->t0, high = p->t1, h = width(l, p->piece), t = 0.5 * (low + high);
    for (int i = 0; i < 100; i++) {
        double got = from_high ? part(l, p->piece, t, p->t1, 0, 0) : part(l, p->piece, p->t0, t, 0, 0);
        double error = from_high ? mass - got : got - mass; /* rises with t */
        if (error > 0)
            high = t;
        else
            low = t;
        double next = t - error / (exp(lm_cubic(l->cubic[p->piece], t)) * h);
        if (!(next > low && next < high))
            next = 0.5 * (low + high);
        if (fabs(next - t) <= DBL_EPSILON * fabs(t) || error == 0)
            break;
        t = next;
    }
    return l->knot[p->piece] + t * h;
}

static double quantile(const lm_term *term, double log_p, bool upper)
{
    const law *l = of(term);
    int side = upper ? 1 : 0;
    double rest = lm_log1mexp(log_p);
    if (rest < log_p) { /* the smaller of the two says more */
        log_p = rest;
        side = 1 - side;
    }
    const tail *t = &l->tail[side];
    if (log_p <= t->log_mass) {
        double logs = t->log_mass - log_p;
        double excess = t->shape == 0 ? t->scale * logs : t->scale * (expm1(t->shape * logs) / t->shape);
        return t->threshold + side_sign[side] * excess;
    }
    double p = exp(log_p);
    size_t low = 0, high = l->panels; /* the panel where the probability from this side passes p */
    while (high - low > 1) {
        size_t middle = (low + high) / 2;
        bool before = side == 0 ? l->panel[middle].below <= p : l->panel[middle - 1].above > p;
        if (before)
            low = middle;
        else
            high = middle;
    }
    const panel *at = &l->panel[low];
    return solve(l, at, p - (side == 0 ? at->below : at->above), side == 1);
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    *mean = of(term)->mean;
    *variance = of(term)->variance;
}

static lm_range support(const lm_term *term)
{
    (void)term;
    return (lm_range){-INFINITY, INFINITY};
}

/* The knots: between them the log density is one formula. */
static size_t landmarks(const lm_term *term, double out[], size_t capacity)
{
    const law *l = of(term);
    for (size_t i = 0; i <= l->pieces && i < capacity; i++)
        out[i] = l->knot[i];
    return l->pieces + 1;
}

/* Which formula holds at y: 0 the tail below, 1 .. pieces the pieces, pieces + 1 the tail above. */
static size_t formula(const law *l, double y)
{
    return y < l->knot[0] ? 0 : y > l->knot[l->pieces] ? l->pieces + 1 : piece_of(l, y) + 1;
}

/* The formulas that hold inside an interval; its ends may have been knots before they were rounded. */
static void formulas(const law *l, double low, double high, size_t *first, size_t *last)
{
    double slack = 8 * DBL_EPSILON;
    double from = low + slack * fabs(low), to = high - slack * fabs(high);
    if (!(from < to))
        from = to = 0.5 * low + 0.5 * high;
    *first = formula(l, from);
    *last = formula(l, to);
}

/* Range over [low, high] of the score (times y where asked) as one formula has it. */
static lm_range formula_range(const law *l, size_t which, double low, double high, bool times_y)
{
    if (which == 0 || which == l->pieces + 1) { /* (1 + shape) / (scale + shape z): monotone, times y too */
        const tail *t = &l->tail[which != 0];
        double at[2] = {low, high}, value[2], sign = side_sign[which != 0];
        for (int k = 0; k < 2; k++) {
            double reach = t->scale + t->shape * sign * (at[k] - t->threshold), over = times_y ? at[k] : 1;
            value[k] = isinf(reach) && times_y ? -(1 + t->shape) / t->shape : -sign * (1 + t->shape) * (over / reach);
        }
        return (lm_range){fmin(value[0], value[1]), fmax(value[0], value[1])};
    }
    size_t piece = which - 1;
    const double *c = l->cubic[piece];
    double h = width(l, piece), start = l->knot[piece];
    double score[4] = {c[1] / h, 2 * c[2] / h, 3 * c[3] / h, 0};
    double product[4] = {start * score[0], start * score[1] + h * score[0], start * score[2] + h * score[1],
                         h * score[2]};
    return lm_cubic_range(times_y ? product : score, (low - start) / h, (high - start) / h);
}

static lm_range range_over(const law *l, double low, double high, bool times_y)
{
    size_t first, last;
    formulas(l, low, high, &first, &last);
    lm_range all = {INFINITY, -INFINITY};
    for (size_t i = first; i <= last; i++) {
        double from = i == first ? low : l->knot[i - 1], to = i == last ? high : l->knot[i];
        lm_range r = formula_range(l, i, from, to, times_y);
        all = (lm_range){fmin(all.low, r.low), fmax(all.high, r.high)};
    }
    return all;
}

static lm_range score_range(const lm_term *term, double low, double high)
{
    return range_over(of(term), low, high, false);
}

static lm_range tail_range(const lm_term *term, double low, double high)
{
    return range_over(of(term), low, high, true);
}

/* A tail as it stands in readings: score = -sign (1 + shape) / (scale + shape sign (x - threshold)). */
typedef struct {
    double threshold, scale, shape, sign, log_edge;
} far_tail;

static far_tail in_readings(const lm_term *term, int side)
{
    const tail *t = &of(term)->tail[side];
    double stretch = fabs(term->scale);
    return (far_tail){.threshold = term->shift + term->scale * t->threshold,
                      .scale = t->scale * stretch,
                      .shape = t->shape,
                      .sign = term->scale > 0 ? side_sign[side] : -side_sign[side],
                      .log_edge = term->log_weight + t->log_edge - log(stretch)};
}

static double far_log_pdf(const far_tail *t, double x)
{
    return t->log_edge + decay(fmax(t->sign * (x - t->threshold), 0), t->scale, t->shape);
}

static double reach(const far_tail *t, double x)
{
    return t->scale + t->shape * t->sign * (x - t->threshold);
}

static double far_score(const far_tail *t, double x)
{
    return -t->sign * (1 + t->shape) / reach(t, x);
}

static void include(lm_range *range, double value)
{
    range->low = fmin(range->low, value);
    range->high = fmax(range->high, value);
}

/* x at which reach(a) = factor reach(b): one line meets another. */
static double meeting(const far_tail *a, const far_tail *b, double factor)
{
    double slope = a->shape * a->sign - factor * b->shape * b->sign;
    double apart = a->threshold - b->threshold; /* counted from b's threshold */
    return b->threshold + (factor * b->scale - a->scale + a->shape * a->sign * apart) / slope;
}

/* Two tails: the log ratio and its slope have one stationary point each at most. */
static void tails_ratio(const far_tail *a, const far_tail *b, double low, double high, lm_range *value, lm_range *slope)
{
    double first = far_log_pdf(a, low) - far_log_pdf(b, low), last = far_log_pdf(a, high) - far_log_pdf(b, high);
    double s_low = far_score(a, low) - far_score(b, low), s_high = far_score(a, high) - far_score(b, high);
    *value = (lm_range){fmin(first, last), fmax(first, last)};
    *slope = (lm_range){fmin(s_low, s_high), fmax(s_low, s_high)};
    double still = meeting(a, b, a->sign * b->sign * (1 + a->shape) / (1 + b->shape));
    if (still > low && still < high)
        include(value, far_log_pdf(a, still) - far_log_pdf(b, still));
    double bend = meeting(a, b, sqrt((1 + a->shape) * a->shape / ((1 + b->shape) * b->shape)));
    if (bend > low && bend < high)
        include(slope, far_score(a, bend) - far_score(b, bend));
}

/* Log density in readings on a piece as a cubic in s, where x = low + s (high - low). */
static void stretched(const lm_term *term, size_t piece, double low, double high, double out[4])
{
    const law *l = of(term);
    const double *c = l->cubic[piece];
    double unit = term->scale * width(l, piece);
    double start = ((low - term->shift) / term->scale - l->knot[piece]) / width(l, piece), d = (high - low) / unit;
    out[0] = lm_cubic(c, start) + term->log_weight - log(fabs(term->scale));
    out[1] = d * (c[1] + start * (2 * c[2] + start * 3 * c[3]));
    out[2] = d * d * (c[2] + 3 * start * c[3]);
    out[3] = d * d * d * c[3];
}

/* Which formula holds over all of an interval of readings; false where several do. */
static bool one_formula(const lm_term *term, double low, double high, size_t *which)
{
    double a = (low - term->shift) / term->scale, b = (high - term->shift) / term->scale;
    size_t last;
    formulas(of(term), fmin(a, b), fmax(a, b), which, &last);
    return *which == last;
}

static bool ratio(const lm_term *a, const lm_term *b, double low, double high, lm_range *value, lm_range *slope)
{
    const law *la = of(a), *lb = of(b);
    size_t fa, fb;
    if (!one_formula(a, low, high, &fa) || !one_formula(b, low, high, &fb))
        return false;
    bool tail_a = fa == 0 || fa > la->pieces, tail_b = fb == 0 || fb > lb->pieces;
    if (tail_a != tail_b)
        return false;
    if (tail_a) {
        far_tail one = in_readings(a, fa != 0), two = in_readings(b, fb != 0);
        tails_ratio(&one, &two, low, high, value, slope);
        if (!isnan(value->low) && !isnan(slope->low))
            return true;
        return false;
    }
    double ca[4], cb[4], c[4], across = high > low ? high - low : 1; /* a single reading still has a slope */
    stretched(a, fa - 1, low, low + across, ca);
    stretched(b, fb - 1, low, low + across, cb);
    for (int k = 0; k < 4; k++)
        c[k] = ca[k] - cb[k];
    double end = high > low ? 1 : 0, rounding = 8 * DBL_EPSILON * (fabs(ca[0]) + fabs(cb[0]));
    double score[4] = {c[1] / across, 2 * c[2] / across, 3 * c[3] / across, 0};
    *value = lm_cubic_range(c, 0, end);
    *slope = lm_cubic_range(score, 0, end);
    if (high > low) { /* what rounding in two numbers of this size leaves of their difference */
        value->low -= rounding;
        value->high += rounding;
    }
    return true;
}

const lm_family lm_family_from_readings = {
    .name = "from_readings",
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .log_mass = log_mass,
    .quantile = quantile,
    .moments = moments,
    .support = support,
    .landmarks = landmarks,
    .score_range = score_range,
    .tail_range = tail_range,
    .ratio = ratio,
};

/* ---- construction ---- */

static void destroy(lm_shared *shared)
{
    law *l = (law *)(void *)shared;
    lm_release(l->given);
    lm_release(l->knot);
    lm_release(l->cubic);
    lm_release(l->panel);
    lm_release(l);
}

static lm_status check(const lm_spline_law *given, lm_fault *fault)
{
    if (given->knots < 2)
        return lm_refuse(fault, LM_SIZE, "knots", (double)given->knots, -1, "at least 2");
    for (size_t i = 0; i < given->knots; i++) {
        ptrdiff_t at = (ptrdiff_t)i;
        if (!(fabs(given->knot[i]) <= 1e307) || (i > 0 && !(given->knot[i] > given->knot[i - 1])))
            return lm_refuse(fault, LM_DOMAIN, "knots", given->knot[i], at, "finite numbers in ascending order");
        if (!isfinite(given->log_density[i]))
            return lm_refuse(fault, LM_DOMAIN, "log_density", given->log_density[i], at, "finite numbers");
        if (!isfinite(given->slope[i]))
            return lm_refuse(fault, LM_DOMAIN, "slope", given->slope[i], at, "finite numbers");
    }
    for (int side = 0; side < 2; side++) {
        if (!(isfinite(given->tail_scale[side]) && given->tail_scale[side] > 0))
            return lm_refuse(fault, LM_DOMAIN, "tail_scale", given->tail_scale[side], side, "a finite number > 0");
        if (!(isfinite(given->tail_shape[side]) && given->tail_shape[side] >= 0))
            return lm_refuse(fault, LM_DOMAIN, "tail_shape", given->tail_shape[side], side, "a finite number >= 0");
    }
    return LM_OK;
}

/* Carries knots and cubics to the standard law. */
static void standardise(law *l)
{
    const lm_spline_law *g = &l->law;
    double narrow = INFINITY;
    l->shift = g->knot[0];
    for (size_t i = 1; i < g->knots; i++)
        l->shift = fabs(g->knot[i]) < fabs(l->shift) ? g->knot[i] : l->shift;
    for (size_t i = 0; i < l->pieces; i++)
        narrow = fmin(narrow, g->knot[i + 1] - g->knot[i]);
    l->scale = ldexp(1, ilogb(narrow));
    double log_scale = log(l->scale);
    for (size_t i = 0; i <= l->pieces; i++)
        l->knot[i] = (g->knot[i] - l->shift) / l->scale;
    for (size_t i = 0; i < l->pieces; i++) {
        double h = g->knot[i + 1] - g->knot[i], rise = g->log_density[i + 1] - g->log_density[i];
        double first = h * g->slope[i], last = h * g->slope[i + 1], *c = l->cubic[i];
        c[0] = g->log_density[i] + log_scale;
        c[1] = first;
        c[2] = 3 * rise - 2 * first - last;
        c[3] = first + last - 2 * rise;
    }
    for (int side = 0; side < 2; side++) {
        size_t end = side == 0 ? 0 : l->pieces;
        double scale = g->tail_scale[side] / l->scale, edge = g->log_density[end] + log_scale;
        l->tail[side] = (tail){l->knot[end], scale, g->tail_shape[side], edge, edge + log(scale)};
    }
}

lm_status lm_density_spline(const lm_spline_law *given, lm_density **out, lm_fault *fault)
{
    LM_TRY(check(given, fault));
    size_t n = given->knots;
    law *l = lm_allocate_zeroed(1, sizeof *l);
    if (l == NULL)
        return LM_NO_MEMORY;
    atomic_init(&l->shared.references, 1);
    l->shared.destroy = destroy;
    lm_status status = LM_NO_MEMORY;
    l->given = lm_allocate(3 * n, sizeof(double));
    l->knot = lm_allocate(n, sizeof(double));
    l->cubic = lm_allocate(n, sizeof *l->cubic);
    if (l->given == NULL || l->knot == NULL || l->cubic == NULL)
        goto failed;
    memcpy(l->given, given->knot, n * sizeof(double));
    memcpy(l->given + n, given->log_density, n * sizeof(double));
    memcpy(l->given + 2 * n, given->slope, n * sizeof(double));
    l->law = *given;
    l->law.knot = l->given;
    l->law.log_density = l->given + n;
    l->law.slope = l->given + 2 * n;
    l->pieces = n - 1;
    standardise(l);
    status = settle(l, fault);
    if (status != LM_OK)
        goto failed;
    lm_term term = {
        .family = &lm_family_from_readings, .shift = l->shift, .scale = l->scale, .data = &l->shared};
    return lm_density_of_term(&term, out);
failed:
    destroy(&l->shared);
    return status;
}

bool lm_density_spline_law(const lm_density *density, lm_spline_law *out)
{
    if (density->count != 1 || density->term[0].family != &lm_family_from_readings)
        return false;
    const lm_term *term = &density->term[0];
    const law *l = of(term);
    if (term->shift != l->shift || term->scale != l->scale)
        return false;
    *out = l->law;
    return true;
}
