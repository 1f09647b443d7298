/* The exhaustive search for changes of sign: subdivision in u until bounds settle every piece, then refinement. */
#include "crossings.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>

#include "../numeric/memory.h"

lm_status lm_points_add(lm_points *points, double x)
{
    if (points->count == points->capacity) {
        size_t capacity = points->capacity > 0 ? 2 * points->capacity : 16;
        double *at = lm_reallocate(points->at, capacity, sizeof *at);
        if (at == NULL)
            return LM_NO_MEMORY;
        points->at = at;
        points->capacity = capacity;
    }
    points->at[points->count++] = x;
    return LM_OK;
}

static int ascending(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

void lm_points_sort(lm_points *points)
{
    size_t kept = 0;
    if (points->count > 1)
        qsort(points->at, points->count, sizeof *points->at, ascending);
    for (size_t i = 0; i < points->count; i++)
        if (kept == 0 || points->at[i] != points->at[kept - 1])
            points->at[kept++] = points->at[i];
    points->count = kept;
}

void lm_points_free(lm_points *points)
{
    lm_release(points->at);
    *points = (lm_points){0};
}

/* A tie counts as not negative: the lower index. */
static bool holds(double h)
{
    return !(h < 0);
}

static double ulp(double x)
{
    return nextafter(fabs(x), INFINITY) - fabs(x);
}

/* The first double of the new sign, between neighbours of a root of which low has the old sign and high the new: so a
 * law narrower than the spacing of doubles keeps the one reading it has. */
static double first_changed(const lm_gap *gap, double low, double high, bool at_low)
{
    for (double x; x = low + 0.5 * (high - low), x > low && x < high;)
        if (holds(lm_gap_value(gap, x, LM_AT, NULL)) == at_low)
            low = x;
        else
            high = x;
    return high;
}

/* The change of sign in (low, high], of which there is one: Newton on h, kept inside the bracket, halving in u where a
 * step leaves it or stalls. Ends when the step is below the spacing of doubles and the sign is seen to change around.
 */
static double refine(const lm_gap *gap, double low, double high, bool at_low)
{
    double x = lm_gap_middle(gap, low, high), width = INFINITY;
    while (nextafter(low, high) < high) {
        double slope, h = lm_gap_value(gap, x, LM_AT, &slope);
        bool same = holds(h) == at_low;
        if (same)
            low = x;
        else
            high = x;
        double next = x - h / slope;
        if (fabs(next - x) <= 2 * ulp(x) && isfinite(next)) {
            double margin = 4 * ulp(x), left = fmax(low, next - margin), right = fmin(high, next + margin);
            bool left_same = left == low || holds(lm_gap_value(gap, left, LM_AT, NULL)) == at_low;
            bool right_same = right != high && holds(lm_gap_value(gap, right, LM_AT, NULL)) == at_low;
            if (left_same && !right_same)
                return first_changed(gap, left, right, at_low);
            low = right_same ? right : low;
            high = left_same ? high : left;
            x = lm_gap_middle(gap, low, high);
            continue;
        }
        bool halve = !(next > low && next < high) || high - low > 0.5 * width;
        width = high - low;
        x = halve ? lm_gap_middle(gap, low, high) : next;
    }
    return high;
}

typedef struct {
    double low, high;
} piece;

/* Stack of pieces still to judge, leftmost on top. Deep enough for halving down to neighbours (1100 halvings), each of
 * which leaves one piece behind. */
enum { DEPTH = 1200, SAMPLES = 512 };

/* A bound on work, so that laws that are equal but for their rounding cannot hang a search; what is left then is
 * counted as unresolved. */
enum { MOST_PIECES = 400000 };

/* The sign of h as far as the search has come. Pieces meet at readings where h may be below its rounding, and bounds on
 * two sides of such a place can settle for two signs: the change is then at the meeting itself. */
typedef enum { UNKNOWN, HELD, LOST } sign;

static sign sign_of(double h)
{
    return holds(h) ? HELD : LOST;
}

static lm_status settle(sign *so_far, piece p, sign first, sign last, lm_points *levels)
{
    if (*so_far != UNKNOWN && first != *so_far)
        LM_TRY(lm_points_add(levels, p.low));
    *so_far = last;
    return LM_OK;
}

static lm_status settle_monotone(const lm_gap *gap, piece p, sign *so_far, lm_points *levels)
{
    sign first = sign_of(lm_gap_value(gap, p.low, LM_FROM_RIGHT, NULL));
    sign last = sign_of(lm_gap_value(gap, p.high, LM_FROM_LEFT, NULL));
    LM_TRY(settle(so_far, p, first, last, levels));
    return first == last ? LM_OK : lm_points_add(levels, refine(gap, p.low, p.high, first == HELD));
}

/* Equal steps in a coordinate that is fine at both ends of the piece and near the centre. A sample that says nothing, a
 * tie or two densities too small for doubles, counts with its neighbours. */
static lm_status sample(const lm_gap *gap, piece p, sign *so_far, lm_points *levels, lm_search *search)
{
    double last = p.low, first = lm_gap_value(gap, p.low, LM_FROM_RIGHT, NULL);
    if (first != 0)
        LM_TRY(settle(so_far, p, sign_of(first), sign_of(first), levels));
    bool far = isinf(p.high - p.low) || p.high - p.low > 1e3 * gap->scale * SAMPLES;
    for (int i = 1; i <= SAMPLES; i++) {
        double part = (double)i / SAMPLES;
        double x = i == SAMPLES ? p.high
                   : far        ? lm_gap_between(gap, p.low, p.high, part)
                                : p.low + (p.high - p.low) * part;
        if (!(x > last))
            continue;
        double now = lm_gap_value(gap, x, x == p.high ? LM_FROM_LEFT : LM_AT, NULL);
        if (!far)
            search->resolution = fmax(search->resolution, (p.high - p.low) / SAMPLES / gap->scale);
        if (now == 0)
            continue;
        if (*so_far != UNKNOWN && sign_of(now) != *so_far)
            LM_TRY(lm_points_add(levels, refine(gap, last, x, *so_far == HELD)));
        *so_far = sign_of(now);
        last = x;
    }
    return LM_OK;
}

/* One stretch between neighbouring breaks. */
static lm_status stretch(lm_gap *gap, double low, double high, sign *so_far, lm_points *levels, lm_search *search,
                         bool *sampled)
{
    piece stack[DEPTH];
    size_t depth = 0;
    stack[depth++] = (piece){low, high};
    while (depth > 0) {
        piece p = stack[--depth];
        search->pieces++;
        switch (lm_gap_judge(gap, p.low, p.high)) {
        case LM_GAP_VOID:
            *so_far = UNKNOWN;
            break;
        case LM_GAP_POSITIVE:
            LM_TRY(settle(so_far, p, HELD, HELD, levels));
            break;
        case LM_GAP_NEGATIVE:
            LM_TRY(settle(so_far, p, LOST, LOST, levels));
            break;
        case LM_GAP_RISING:
        case LM_GAP_FALLING:
            LM_TRY(settle_monotone(gap, p, so_far, levels));
            break;
        case LM_GAP_TIED:
            search->touches++;
            LM_TRY(settle_monotone(gap, p, so_far, levels));
            break;
        case LM_GAP_BOUNDLESS:
            *sampled = true;
            LM_TRY(sample(gap, p, so_far, levels, search));
            break;
        case LM_GAP_OPEN: {
            double middle = lm_gap_middle(gap, p.low, p.high);
            bool neighbours = !(middle > p.low && middle < p.high);
            if (neighbours || depth + 2 > DEPTH || search->pieces > MOST_PIECES) {
                /* Neighbouring doubles: there is no reading between. */
                if (neighbours)
                    search->touches++;
                else
                    search->unresolved++;
                LM_TRY(settle_monotone(gap, p, so_far, levels));
            } else {
                stack[depth++] = (piece){middle, p.high};
                stack[depth++] = (piece){p.low, middle};
            }
            break;
        }
        }
    }
    return LM_OK;
}

/* The farthest reading at which y is a double for every term. Gaussians need none: their ratio is taken in x. */
static double farthest(const lm_gap *gap)
{
    double least = 1;
    for (size_t i = 0; i < gap->count; i++)
        if (gap->term[i].term.family != &lm_family_gaussian)
            least = fmin(least, fabs(gap->term[i].term.scale));
    return least < 1 ? 0.25 * DBL_MAX * least : DBL_MAX;
}

lm_status lm_gap_crossings(lm_gap *gap, const lm_points *breaks, lm_points *levels, lm_search *search)
{
    bool sampled = false;
    sign so_far = UNKNOWN;
    double limit = farthest(gap), low = -limit;
    for (size_t i = 0; i <= breaks->count; i++) {
        double high = i < breaks->count ? breaks->at[i] : limit;
        if (!(high > low && high <= limit))
            continue;
        LM_TRY(stretch(gap, low, high, &so_far, levels, search, &sampled));
        low = high;
    }
    search->sampled += sampled;
    return LM_OK;
}
