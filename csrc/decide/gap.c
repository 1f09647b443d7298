/* Bounds on the gap between two decisions over an interval, and its value at a point.
 *
 * Ranges of the single log densities would not do: far out both are huge and nearly cancel. What is bounded is the log
 * ratio of each term to the one that is largest at the middle of the piece, and the ratio's slope: in closed form for
 * two terms of one family, else from the ranges of the two scores. A ratio whose slope keeps one sign has its range
 * at the ends; another is enclosed by the mean-value form, whose width shrinks with the square of the piece's (R. E.
 * Moore, Interval Analysis, 1966, ch. 6). The sums are then compared, and if that leaves the sign open, the slope of
 * each log sum is bounded as the mean of its terms' slopes with weights anywhere in their ranges.
 */
#include "gap.h"

#include <float.h>
#include <math.h>

#include "../numeric/constants.h"
#include "../numeric/logspace.h"

/* Rounding of a log density or a score, in units of its value: a few operations each, and libm's own error. */
#define NOISE (8 * DBL_EPSILON)

static const lm_range everything = {-INFINITY, INFINITY};

static double dx_du(const lm_gap *gap, double x)
{
    return hypot(gap->scale, x - gap->centre);
}

/* asinh of z = (x - centre) / scale, which may overflow where asinh does not: log(2 |z|) far out. */
static double u_of(const lm_gap *gap, double x)
{
    double away = x - gap->centre;
    if (isinf(away))
        away = copysign(DBL_MAX, away);
    double z = away / gap->scale;
    return fabs(z) < 1e150 ? asinh(z) : copysign(log(fabs(away)) - log(gap->scale) + LM_LN2, z);
}

static double x_of(const lm_gap *gap, double u)
{
    double z = fabs(u) < 350 ? gap->scale * sinh(u) : copysign(exp(fabs(u) - LM_LN2 + log(gap->scale)), u);
    return gap->centre + z;
}

double lm_gap_between(const lm_gap *gap, double low, double high, double part)
{
    double a = u_of(gap, low), b = u_of(gap, high);
    return x_of(gap, a + (b - a) * part);
}

double lm_gap_middle(const lm_gap *gap, double low, double high)
{
    double x = lm_gap_between(gap, low, high, 0.5);
    if (!(x > low && x < high))
        x = 0.5 * low + 0.5 * high;
    if (!(x > low && x < high))
        x = nextafter(low, high);
    return x;
}

static bool lives(const lm_gap_term *t, double low, double high)
{
    return t->support.low <= low && t->support.high >= high;
}

/* y of a reading that lies inside the support, kept there although shift and scale round; never -0, whose inverse
 * would have the wrong sign at the edge of a mirrored law. */
static double inside(const lm_term *term, double x)
{
    lm_range y = term->family->support(term);
    return fmin(fmax((x - term->shift) / term->scale, y.low), y.high) + 0.0;
}

static double log_value(const lm_gap_term *t, double x)
{
    double y = inside(&t->term, x), value;
    t->term.family->log_pdf(&t->term, &y, &value, 1);
    return t->term.log_weight - t->log_scale + value;
}

static lm_range hull(double a, double b)
{
    return a < b ? (lm_range){a, b} : (lm_range){b, a};
}

static lm_range times(lm_range a, lm_range b)
{
    double lowest = INFINITY, highest = -INFINITY;
    const double left[2] = {a.low, a.high}, right[2] = {b.low, b.high};
    for (int i = 0; i < 2; i++)
        for (int j = 0; j < 2; j++) {
            double product = left[i] == 0 || right[j] == 0 ? 0 : left[i] * right[j];
            lowest = fmin(lowest, product);
            highest = fmax(highest, product);
        }
    return (lm_range){lowest, highest};
}

static lm_range meet(lm_range a, lm_range b)
{
    lm_range both = {fmax(a.low, b.low), fmin(a.high, b.high)};
    return both.low <= both.high ? both : a; /* rounding may part two ranges that only touch */
}

/* Difference of two ranges of scores, widened by their rounding; two equal numbers differ by exactly nothing. */
static lm_range difference(lm_range a, lm_range b)
{
    if (a.low == a.high && b.low == b.high && a.low == b.low)
        return (lm_range){0, 0};
    double low = a.low - b.high, high = a.high - b.low;
    low -= NOISE * fmax(fabs(a.low), fabs(b.high));
    high += NOISE * fmax(fabs(a.high), fabs(b.low));
    return (lm_range){isnan(low) ? -INFINITY : low, isnan(high) ? INFINITY : high};
}

static lm_range standard_range(const lm_term *term, double low, double high)
{
    return hull(inside(term, low), inside(term, high));
}

/* Score in x over a piece. */
static lm_range score(const lm_term *term, double low, double high)
{
    lm_range y = standard_range(term, low, high), s = term->family->score_range(term, y.low, y.high);
    return hull(s.low / term->scale, s.high / term->scale);
}

/* Score times dx/du over a piece: from the score, and from y * score(y) = (x - shift) * score where tails are powers.
 * dx/du over |x - shift| has its one stationary point where (x - centre)(centre - shift) = scale^2. */
static lm_range score_u(const lm_gap *gap, const lm_term *term, double low, double high)
{
    lm_range stretch = hull(dx_du(gap, low), dx_du(gap, high)); /* monotone: pieces do not straddle the centre */
    lm_range s = times(score(term, low, high), stretch);
    if (term->family->tail_range == NULL || !(low > term->shift || high < term->shift))
        return s;
    lm_range y = standard_range(term, low, high), tail = term->family->tail_range(term, y.low, y.high);
    double first = dx_du(gap, low) / (low - term->shift), last = dx_du(gap, high) / (high - term->shift);
    lm_range per = hull(first, last);
    double still = gap->centre + gap->scale * gap->scale / (gap->centre - term->shift);
    if (still > low && still < high) {
        double there = dx_du(gap, still) / (still - term->shift);
        per = (lm_range){fmin(per.low, there), fmax(per.high, there)};
    }
    return meet(times(tail, per), s);
}

/* Room for the rounding of each end; an infinite end needs none. */
static void widen(lm_gap_bound *b, double low, double high)
{
    low = isfinite(low) ? low : 0;
    high = isfinite(high) ? high : 0;
    b->ratio.low -= low;
    b->ratio.high += high;
    b->noise = fmin(low, high);
}

/* Ratio of a term to the reference, and its slopes, over [low, high] with the given middle. */
static void bound_pair(const lm_gap *gap, const lm_gap_term *t, const lm_gap_term *reference, double low, double middle,
                       double high, double reference_at_middle, lm_gap_bound *b)
{
    const lm_term *a = &t->term, *r = &reference->term;
    lm_range stretch = hull(dx_du(gap, low), dx_du(gap, high));
    if (a->family == r->family && a->family->ratio != NULL && a->family->ratio(a, r, low, high, &b->ratio, &b->slope)) {
        double constant = fabs(a->log_weight) + fabs(r->log_weight);
        widen(b, NOISE * (constant + fabs(b->ratio.low)), NOISE * (constant + fabs(b->ratio.high)));
        b->slope_u = times(b->slope, stretch);
        return;
    }
    b->slope = difference(score(a, low, high), score(r, low, high));
    b->slope_u = times(b->slope, stretch);
    if (gap->power_tails)
        b->slope_u = meet(difference(score_u(gap, a, low, high), score_u(gap, r, low, high)), b->slope_u);

    double at_middle = b->at_middle - reference_at_middle;
    bool rises = b->slope.low >= 0 || b->slope_u.low >= 0, falls = b->slope.high <= 0 || b->slope_u.high <= 0;
    if (rises || falls) {
        double a_low = log_value(t, low), a_high = log_value(t, high);
        double r_low = log_value(reference, low), r_high = log_value(reference, high);
        double first = a_low - r_low, last = a_high - r_high;
        first = isnan(first) ? (rises ? -INFINITY : INFINITY) : first; /* both infinite: the end says nothing */
        last = isnan(last) ? (rises ? INFINITY : -INFINITY) : last;
        double at_first = NOISE * (fabs(a_low) + fabs(r_low)), at_last = NOISE * (fabs(a_high) + fabs(r_high));
        b->ratio = hull(first, last);
        widen(b, first < last ? at_first : at_last, first < last ? at_last : at_first);
        return;
    }
    if (isnan(at_middle) || isinf(at_middle)) {
        b->ratio = everything;
        return;
    }
    lm_range right = times(b->slope, (lm_range){0, high - middle}), left = times(b->slope, (lm_range){low - middle, 0});
    lm_range in_x = {fmin(left.low, right.low), fmax(left.high, right.high)};
    double first = u_of(gap, low), last = u_of(gap, high);
    double u = u_of(gap, middle);
    right = times(b->slope_u, (lm_range){0, last - u});
    left = times(b->slope_u, (lm_range){first - u, 0});
    lm_range in_u = {fmin(left.low, right.low), fmax(left.high, right.high)};
    lm_range rise = meet(in_x, in_u);
    double noise = NOISE * (fabs(b->at_middle) + fabs(reference_at_middle));
    b->ratio = (lm_range){at_middle + rise.low, at_middle + rise.high};
    widen(b, noise, noise);
}

/* log of the sum of exp(low ends) and of exp(high ends) of one sign; false where there is no such term. */
static bool sum_of(const lm_gap_bound bound[], size_t n, bool positive, lm_range *out)
{
    bool any = false;
    *out = (lm_range){-INFINITY, -INFINITY};
    for (size_t i = 0; i < n; i++)
        if (bound[i].positive == positive) {
            out->low = any ? lm_log_add(out->low, bound[i].ratio.low) : bound[i].ratio.low;
            out->high = any ? lm_log_add(out->high, bound[i].ratio.high) : bound[i].ratio.high;
            any = true;
        }
    return any;
}

/* The largest mean of the terms' greatest slopes (or, mirrored, the smallest of their least) over all weights in their
 * ranges: some number of the steepest terms at their largest weight, the others at their least. */
static double extreme_mean(const lm_gap_bound bound[], size_t n, size_t order[], bool positive, bool in_u, bool largest)
{
    size_t count = 0;
    double top = -INFINITY;
    for (size_t i = 0; i < n; i++)
        if (bound[i].positive == positive) {
            const lm_range *slope = in_u ? &bound[i].slope_u : &bound[i].slope;
            double key = largest ? slope->high : -slope->low;
            size_t at = count++;
            for (; at > 0; at--) {
                const lm_range *other = in_u ? &bound[order[at - 1]].slope_u : &bound[order[at - 1]].slope;
                if ((largest ? other->high : -other->low) >= key)
                    break;
                order[at] = order[at - 1];
            }
            order[at] = i;
            top = fmax(top, bound[i].ratio.low);
        }
    /* Slopes in units of the largest, weights in units of the largest least one, so that they sum to 1 at least and
     * what underflows is below the rounding added in the end; one beyond exp(MOST) outweighs all others by more than
     * that as it is. */
    enum { MOST = 600 };
#define STEEP(k)                                                                                                       \
    (largest ? (in_u ? bound[order[k]].slope_u.high : bound[order[k]].slope.high)                                      \
             : -(in_u ? bound[order[k]].slope_u.low : bound[order[k]].slope.low))
    double best = STEEP(0), unit = fmax(fabs(STEEP(0)), fabs(STEEP(count - 1)));
    if (count > 1 && isfinite(top) && isfinite(unit) && unit > 0) {
        double weights = 0, moment = 0;
        for (size_t k = 0; k < count; k++) {
            double w = exp(bound[order[k]].ratio.low - top);
            weights += w;
            moment += w * (STEEP(k) / unit);
        }
        best = -INFINITY;
        for (size_t k = 0; k < count; k++) {
            const lm_range *ratio = &bound[order[k]].ratio;
            double more = exp(fmin(ratio->high - top, MOST)) - exp(ratio->low - top);
            weights += more;
            moment += more * (STEEP(k) / unit);
            best = fmax(best, moment / weights);
        }
        best = fmin((best + NOISE * (double)count) * unit, STEEP(0));
    }
#undef STEEP
    return largest ? best : -best;
}

static lm_range mean_of(const lm_gap *gap, size_t n, bool positive, bool in_u)
{
    return (lm_range){extreme_mean(gap->bound, n, gap->order, positive, in_u, false),
                      extreme_mean(gap->bound, n, gap->order, positive, in_u, true)};
}

/* Whether term i outweighs term j at x; far out, where both have underflowed, their ratio still knows. */
static bool outweighs(const lm_gap *gap, size_t i, double value, size_t j, double other, double x)
{
    const lm_term *a = &gap->term[i].term, *b = &gap->term[j].term;
    lm_range ratio, slope;
    if (value == other && isinf(value) && a->family == b->family && a->family->ratio != NULL &&
        a->family->ratio(a, b, x, x, &ratio, &slope))
        return ratio.low > 0;
    return value > other;
}

lm_verdict lm_gap_judge(lm_gap *gap, double low, double high)
{
    double middle = lm_gap_middle(gap, low, high), largest = -INFINITY;
    size_t n = 0, reference = 0, positives = 0;
    bool boundless = false;
    for (size_t i = 0; i < gap->count; i++) {
        const lm_gap_term *t = &gap->term[i];
        if (!lives(t, low, high))
            continue;
        double value = log_value(t, middle);
        boundless |= t->term.family->score_range == NULL;
        if (n == 0 || outweighs(gap, i, value, reference, largest, middle)) {
            largest = value;
            reference = i;
        }
        positives += t->positive;
        gap->bound[n] = (lm_gap_bound){.at_middle = value, .positive = t->positive};
        gap->order[n++] = i;
    }
    if (n == 0)
        return LM_GAP_VOID;
    if (positives == 0 || positives == n)
        return positives > 0 ? LM_GAP_POSITIVE : LM_GAP_NEGATIVE;
    if (boundless)
        return LM_GAP_BOUNDLESS;
    for (size_t k = 0; k < n; k++) {
        size_t i = gap->order[k];
        if (i != reference)
            bound_pair(gap, &gap->term[i], &gap->term[reference], low, middle, high, largest, &gap->bound[k]);
    }
    lm_range plus, minus;
    sum_of(gap->bound, n, true, &plus);
    sum_of(gap->bound, n, false, &minus);
    if (plus.low > minus.high)
        return LM_GAP_POSITIVE;
    if (plus.high < minus.low)
        return LM_GAP_NEGATIVE;
    for (int in_u = 0; in_u <= (gap->power_tails ? 1 : 0); in_u++) {
        lm_range up = mean_of(gap, n, true, in_u), down = mean_of(gap, n, false, in_u);
        if (up.low >= down.high && up.high > down.low)
            return LM_GAP_RISING;
        if (up.high <= down.low && up.low < down.high)
            return LM_GAP_FALLING;
    }
    /* Nothing left to see: the whole range of h is no wider than the rounding that went into it. A term that is a small
     * part of its sum brings that part of its own rounding: a narrow one far away has much, and counts for nothing. */
    double widest = fmax(plus.high - minus.low, minus.high - plus.low), noise = DBL_EPSILON;
    for (size_t k = 0; k < n; k++) {
        double part = exp(fmin(0, gap->bound[k].ratio.high - (gap->bound[k].positive ? plus.low : minus.low)));
        noise += part > 0 ? part * gap->bound[k].noise : 0;
    }
    if (widest <= 4 * noise)
        return LM_GAP_TIED;
    return LM_GAP_OPEN;
}

static bool lives_beside(const lm_gap_term *t, double x, lm_side beside)
{
    if (beside == LM_FROM_LEFT)
        return t->support.low < x && x <= t->support.high;
    if (beside == LM_FROM_RIGHT)
        return t->support.low <= x && x < t->support.high;
    return t->support.low <= x && x <= t->support.high;
}

double lm_gap_value(const lm_gap *gap, double x, lm_side beside, double *slope)
{
    double largest = -INFINITY;
    size_t reference = SIZE_MAX;
    for (size_t i = 0; i < gap->count; i++)
        if (lives_beside(&gap->term[i], x, beside)) {
            double value = log_value(&gap->term[i], x);
            gap->bound[i].at_middle = value;
            if (reference == SIZE_MAX || outweighs(gap, i, value, reference, largest, x)) {
                largest = value;
                reference = i;
            }
        }
    if (reference == SIZE_MAX)
        return NAN;
    double sum[2] = {-INFINITY, -INFINITY}, mean[2] = {0, 0};
    const lm_term *r = &gap->term[reference].term;
    for (size_t i = 0; i < gap->count; i++) {
        const lm_gap_term *t = &gap->term[i];
        if (!lives_beside(t, x, beside))
            continue;
        lm_range ratio = {0, 0}, steep = {0, 0};
        if (i != reference && !(t->term.family == r->family && r->family->ratio != NULL &&
                                r->family->ratio(&t->term, r, x, x, &ratio, &steep))) {
            double value = gap->bound[i].at_middle - largest;
            ratio.low = isnan(value) ? 0 : value; /* both infinite, or both -inf: no telling them apart */
            bool scored = slope != NULL && t->term.family->score_range != NULL && r->family->score_range != NULL;
            steep.low = scored ? score(&t->term, x, x).low - score(r, x, x).low : NAN;
        }
        double *s = &sum[t->positive];
        double total = lm_log_add(*s, ratio.low);
        if (total > -INFINITY)
            mean[t->positive] = (*s > -INFINITY ? mean[t->positive] * exp(*s - total) : 0) +
                                (ratio.low > -INFINITY ? steep.low * exp(ratio.low - total) : 0);
        *s = total;
    }
    if (slope != NULL)
        *slope = mean[1] - mean[0];
    return sum[1] == sum[0] ? 0 : sum[1] - sum[0];
}
