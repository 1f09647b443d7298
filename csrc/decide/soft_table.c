/* A table of a smooth function of the reading: the line cut into segments on which a polynomial keeps the error bound,
 * from the middle outwards for as long as segments last.
 *
 * A segment's polynomial interpolates at Chebyshev nodes and is judged at 33 points between and beside them; what
 * single precision adds is bounded by the size of the coefficients. Widths are tried in u = asinh((x - centre) /
 * scale), so that a tail costs one segment for each few octaves. Where nothing wide enough fits (beside a pole, say) a
 * hole is left to the exact function.
 */
#include "soft_table.h"

#include <float.h>
#include <math.h>
#include <string.h>

#include "../numeric/memory.h"

enum { NODES = LM_SOFT_DEGREE + 1, CHECKS = 33, ROWS = LM_SOFT_DEGREE + 3, ENOUGH = 62 };

#define EDGE 0x1p126 /* beyond it the stretch of a segment would be denormal in single precision */
/* What is promised is 1e-6 of max(1, |value|): 4e-7 at the points judged, for a little more between them, and in single
 * precision 4e-7 for rounding: half a unit each for a coefficient, a product and a sum, and one for t, k times in the
 * k-th power. */
#define BOUND 4e-7
#define SINGLE_BOUND 4e-7
#define NARROWEST 1e-4 /* in u: the width at which a hole is cheaper than segments */

typedef struct {
    double left, right;
    bool hole;
    double coefficient[ROWS];
    float single[ROWS];
} segment;

typedef struct {
    const lm_soft_function *f;
    bool single;
    size_t count[2];  /* below and above the start */
    segment *side[2]; /* LM_SOFT_MOST each, from the start outwards */
    double reach[2];  /* how far each side has got */
    double length[2]; /* in u, of the last segment on each side */
    bool closed[2];
} builder;

static double to_u(const builder *b, double x)
{
    return asinh((x - b->f->centre) / b->f->scale);
}

static double from_u(const builder *b, double u)
{
    return b->f->centre + b->f->scale * sinh(u);
}

static bool close_enough(double got, double wanted)
{
    if (isnan(wanted) || isinf(wanted))
        return got == wanted || (isnan(wanted) && isnan(got));
    return fabs(got - wanted) <= BOUND * fmax(1, fabs(wanted));
}

/* Powers of t from values at the Chebyshev nodes cos(pi (2j + 1) / (2 NODES)). */
static void interpolate(const double value[NODES], double power[NODES])
{
    const double pi = acos(-1);
    double before[NODES] = {1}, now[NODES] = {0, 1}; /* Chebyshev polynomials k - 1 and k, in powers */
    memset(power, 0, NODES * sizeof *power);
    for (int k = 0; k < NODES; k++) {
        double c = 0;
        for (int j = 0; j < NODES; j++)
            c += value[j] * cos(pi * k * (2 * j + 1) / (2 * NODES));
        c *= (k == 0 ? 1.0 : 2.0) / NODES;
        const double *chebyshev = k == 0 ? before : now;
        for (int p = 0; p < NODES; p++)
            power[p] += c * chebyshev[p];
        if (k > 0) {
            double next[NODES];
            for (int p = 0; p < NODES; p++)
                next[p] = (p > 0 ? 2 * now[p - 1] : 0) - before[p];
            memcpy(before, now, sizeof before);
            memcpy(now, next, sizeof now);
        }
    }
}

/* The same polynomial in single precision: centre and stretch are rounded, and t moved accordingly, before the powers
 * are. */
static void to_single(const double coefficient[ROWS], float single[ROWS])
{
    const float centre = (float)coefficient[NODES], stretch = (float)coefficient[NODES + 1];
    const double slope = coefficient[NODES + 1] / (double)stretch;
    const double offset = ((double)centre - coefficient[NODES]) * coefficient[NODES + 1];
    double moved[NODES] = {0};
    for (int k = NODES - 1; k >= 0; k--) {
        for (int p = NODES - 1; p >= 0; p--)
            moved[p] = moved[p] * offset + (p > 0 ? moved[p - 1] * slope : 0);
        moved[0] += coefficient[k];
    }
    for (int p = 0; p < NODES; p++)
        single[p] = (float)moved[p];
    single[NODES] = centre;
    single[NODES + 1] = stretch;
}

static void constant(segment *s, double value)
{
    memset(s->coefficient, 0, sizeof s->coefficient);
    memset(s->single, 0, sizeof s->single);
    s->coefficient[0] = value;
    s->single[0] = (float)value;
}

/* Whether a polynomial serves for left <= x < right; it is in s then. */
static lm_status fit(const builder *b, double left, double right, segment *s, bool *fits)
{
    *fits = false;
    *s = (segment){.left = left, .right = right};
    const double last = nextafter(right, left), centre = 0.5 * left + 0.5 * last, half = 0.5 * last - 0.5 * left;
    const double pi = acos(-1);
    double x[NODES + CHECKS], value[NODES + CHECKS];
    for (int j = 0; j < NODES; j++)
        x[j] = centre + half * cos(pi * (2 * j + 1) / (2 * NODES));
    for (int j = 0; j < CHECKS; j++)
        x[NODES + j] = j == 0 ? left : j == CHECKS - 1 ? last : centre - half * cos(pi * j / (CHECKS - 1));
    for (int j = 0; j < NODES + CHECKS; j++)
        x[j] = fmin(fmax(x[j], left), last);
    LM_TRY(b->f->values(b->f->context, x, value, NODES + CHECKS));

    bool same = true;
    for (int j = 1; j < NODES + CHECKS; j++)
        same = same && (value[j] == value[0] || (isnan(value[j]) && isnan(value[0])));
    if (same || half == 0) {
        constant(s, value[0]);
        *fits = true;
        return LM_OK;
    }
    if (!isfinite(1 / half))
        return LM_OK;
    interpolate(value, s->coefficient);
    s->coefficient[NODES] = centre;
    s->coefficient[NODES + 1] = 1 / half;
    for (int j = NODES; j < NODES + CHECKS; j++)
        if (!close_enough(lm_soft_polynomial(s->coefficient, x[j]), value[j]))
            return LM_OK;
    if (b->single) {
        to_single(s->coefficient, s->single);
        double least = INFINITY, rounding = 0;
        for (int j = NODES; j < NODES + CHECKS; j++)
            least = fmin(least, fabs(value[j]));
        for (int k = 0; k < NODES; k++)
            rounding += (1 + 1.5 * k) * 0x1p-24 * fabs((double)s->single[k]);
        if (!(rounding <= SINGLE_BOUND * fmax(1, least)))
            return LM_OK;
    }
    *fits = true;
    return LM_OK;
}

static lm_status fit_towards(const builder *b, double from, double to, segment *s, bool *fits)
{
    return from < to ? fit(b, from, to, s, fits) : fit(b, to, from, s, fits);
}

/* One segment more on a side (0 below, 1 above). */
static lm_status extend(builder *b, int side)
{
    const double sign = side == 1 ? 1 : -1, from = b->reach[side], u = to_u(b, from);
    double limit = sign * EDGE;
    for (size_t i = 0; i < b->f->breaks; i++)
        if (sign * b->f->at[i] > sign * from && sign * b->f->at[i] < sign * limit)
            limit = b->f->at[i];
    if (sign * from >= EDGE) {
        b->closed[side] = true;
        return LM_OK;
    }
    segment *s = &b->side[side][b->count[side]], trial;
    double good = from, bad = NAN, length = 2 * b->length[side];
    for (int attempt = 0; attempt < 60; attempt++) {
        double to;
        if (isnan(bad)) { /* nothing has failed yet: further out */
            to = from_u(b, u + sign * length);
            length *= 4;
            if (!(sign * to < sign * limit))
                to = limit;
        } else {
            double width = fabs(to_u(b, bad) - to_u(b, good));
            if (width < NARROWEST || (good != from && width < 0.1 * fabs(to_u(b, good) - u)))
                break;
            to = from_u(b, 0.5 * to_u(b, good) + 0.5 * to_u(b, bad));
        }
        if (sign * to <= sign * good || (!isnan(bad) && sign * to >= sign * bad))
            break;
        bool fits;
        LM_TRY(fit_towards(b, from, to, &trial, &fits));
        if (fits) {
            *s = trial;
            good = to;
            if (to == limit)
                break;
        } else {
            bad = to;
        }
    }
    if (good == from) { /* a hole, as narrow as it was seen to be needed */
        double to = from_u(b, u + sign * 4 * NARROWEST);
        if (!(sign * to > sign * from) || sign * to > sign * limit)
            to = limit;
        *s = (segment){.left = fmin(from, to), .right = fmax(from, to), .hole = true};
        constant(s, NAN);
        good = to;
    }
    b->length[side] = fmax(fabs(to_u(b, good) - u), NARROWEST);
    b->reach[side] = good;
    b->count[side]++;
    return LM_OK;
}

static bool covers_bulk(const builder *b)
{
    return b->reach[0] <= b->f->bulk.low && b->reach[1] >= b->f->bulk.high;
}

static lm_status build(builder *b)
{
    for (int side = 0; side < 2; side++) {
        b->count[side] = 0;
        b->reach[side] = b->f->centre;
        b->length[side] = 0.25;
        b->closed[side] = false;
    }
    for (;;) {
        const size_t total = b->count[0] + b->count[1];
        if (total >= LM_SOFT_MOST || (total >= ENOUGH && covers_bulk(b)) || (b->closed[0] && b->closed[1]))
            return LM_OK;
        const double out[2] = {-to_u(b, b->reach[0]), to_u(b, b->reach[1])};
        int side = b->closed[0] || (!b->closed[1] && out[1] <= out[0]) ? 1 : 0;
        if (total >= ENOUGH && !b->closed[1 - side] &&
            (side == 1 ? b->reach[1] >= b->f->bulk.high : b->reach[0] <= b->f->bulk.low))
            side = 1 - side;
        LM_TRY(extend(b, side));
    }
}

static size_t holes(const builder *b)
{
    size_t count = 0;
    for (int side = 0; side < 2; side++)
        for (size_t i = 0; i < b->count[side]; i++)
            count += b->side[side][i].hole;
    return count;
}

static lm_status plan(const builder *b, lm_soft **out)
{
    const size_t count = b->count[0] + b->count[1];
    double *edge = lm_allocate(count + 1, sizeof *edge);
    double (*coefficient)[ROWS] = lm_allocate(count, sizeof *coefficient);
    float (*single)[ROWS] = lm_allocate(count, sizeof *single);
    bool *hole = lm_allocate(count, sizeof *hole);
    lm_status status = LM_NO_MEMORY;
    if (edge != NULL && coefficient != NULL && single != NULL && hole != NULL) {
        for (size_t i = 0; i < count; i++) {
            const segment *s = i < b->count[0] ? &b->side[0][b->count[0] - 1 - i] : &b->side[1][i - b->count[0]];
            edge[i] = s->left;
            edge[i + 1] = s->right;
            hole[i] = s->hole;
            memcpy(coefficient[i], s->coefficient, sizeof s->coefficient);
            memcpy(single[i], s->single, sizeof s->single);
        }
        lm_soft_plan made = {.count = count, .edge = edge, .hole = hole, .single = b->single};
        made.coefficient = (const double (*)[ROWS])coefficient;
        made.single_coefficient = (const float (*)[ROWS])single;
        made.exact = b->f->values;
        made.context = b->f->context;
        made.step = 1;
        status = lm_soft_new(&made, out);
    }
    lm_release(edge);
    lm_release(coefficient);
    lm_release(single);
    lm_release(hole);
    return status;
}

lm_status lm_soft_compile(const lm_soft_function *function, lm_soft **out)
{
    *out = NULL;
    builder b = {.f = function, .single = true};
    lm_status status = LM_NO_MEMORY;
    for (int side = 0; side < 2; side++)
        b.side[side] = lm_allocate(LM_SOFT_MOST, sizeof *b.side[side]);
    if (b.side[0] != NULL && b.side[1] != NULL)
        status = build(&b);
    if (status == LM_OK && (holes(&b) > 8 || !covers_bulk(&b))) { /* single precision may be too coarse: double alone */
        b.single = false;
        status = build(&b);
    }
    if (status == LM_OK)
        status = plan(&b, out);
    lm_release(b.side[0]);
    lm_release(b.side[1]);
    return status;
}
