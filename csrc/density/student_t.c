/* Student's t: standard law with density proportional to (1 + y^2 / dof)^(-(dof + 1) / 2). The Cauchy law has dof 1. */
#include <float.h>
#include <math.h>

#include "../numeric/student.h"
#include "family.h"

enum { DOF = 0, LOG_PEAK = 0 };

static void fill(lm_term *term, double loc, double scale, double dof)
{
    term->shift = loc;
    term->scale = scale;
    term->shape[DOF] = dof;
    term->constant[LOG_PEAK] = lm_student_log_peak(dof);
}

static lm_status make(const double parameters[], lm_term *term, lm_fault *fault)
{
    (void)fault;
    fill(term, parameters[0], parameters[1], parameters[2]);
    return LM_OK;
}

static lm_status make_cauchy(const double parameters[], lm_term *term, lm_fault *fault)
{
    (void)fault;
    term->family = &lm_family_student_t;
    fill(term, parameters[0], parameters[1], 1);
    return LM_OK;
}

static void log_pdf(const lm_term *term, const double y[], double out[], size_t n)
{
    double dof = term->shape[DOF], peak = term->constant[LOG_PEAK], power = 0.5 * (dof + 1);
    for (size_t i = 0; i < n; i++)
        out[i] = peak - power * lm_student_log_spread(dof, y[i]);
}

static double log_sf(const lm_term *term, double y)
{
    return lm_student_log_sf(term->shape[DOF], term->constant[LOG_PEAK], y);
}

static double log_cdf(const lm_term *term, double y)
{
    return log_sf(term, -y);
}

static double quantile(const lm_term *term, double log_p, bool upper)
{
    double t = lm_student_isf(term->shape[DOF], term->constant[LOG_PEAK], log_p);
    return upper ? t : -t;
}

static void moments(const lm_term *term, double *mean, double *variance)
{
    double dof = term->shape[DOF];
    *mean = dof > 1 ? 0 : NAN;
    *variance = dof > 2 ? dof / (dof - 2) : dof > 1 ? INFINITY : NAN;
}

static lm_range support(const lm_term *term)
{
    (void)term;
    return (lm_range){-INFINITY, INFINITY};
}

static size_t landmarks(const lm_term *term, double out[], size_t capacity)
{
    (void)term;
    if (capacity > 0)
        out[0] = 0;
    return 1;
}

static double score(double dof, double y)
{
    return y == 0 ? 0 : -(dof + 1) / (dof / y + y);
}

/* Falls to its least at sqrt(dof), mirrored. */
static lm_range score_range(const lm_term *term, double low, double high)
{
    double dof = term->shape[DOF], turn = sqrt(dof), first = score(dof, low), last = score(dof, high);
    lm_range s = {fmin(first, last), fmax(first, last)};
    if (low < turn && high > turn)
        s.low = score(dof, turn) * (1 + 2 * DBL_EPSILON);
    if (low < -turn && high > -turn)
        s.high = score(dof, -turn) * (1 + 2 * DBL_EPSILON);
    return s;
}

/* y score(y) = -(dof + 1) / (1 + dof / y^2): from 0 at the middle to -(dof + 1) far out. */
static double tail_at(double dof, double y)
{
    return -(dof + 1) / (1 + dof / y / y);
}

static lm_range tail_range(const lm_term *term, double low, double high)
{
    double dof = term->shape[DOF], first = tail_at(dof, low), last = tail_at(dof, high);
    lm_range t = {fmin(first, last), fmax(first, last)};
    if (low < 0 && high > 0)
        t.high = 0;
    return t;
}

/* With t = x - m_b, d = m_a - m_b and one dof: log f_a - log f_b is a constant plus (dof + 1) / 2 times
 * log((dof + y_b^2) / (dof + y_a^2)), whose argument less 1 is (y_b - y_a)(y_b + y_a) / (dof + y_a^2), differences of
 * the parameters alone; it is stationary where d t^2 - (dof (s_a^2 - s_b^2) + d^2) t - d dof s_b^2 = 0. */
typedef struct {
    double constant, dof, root_dof, sa, sb, apart, middle;
} pair;

static double ratio_at(const pair *p, double t)
{
    double ya = (t - p->apart) / p->sa, yb = t / p->sb;
    double ha = hypot(p->root_dof, ya), hb = hypot(p->root_dof, yb);
    double less = (t * ((p->sa - p->sb) / p->sa) + p->apart * (p->sb / p->sa)) / p->sb;
    double excess = less / ha * ((yb + ya) / ha);
    double log_spread = fabs(excess) < 0.5 ? log1p(excess) : 2 * log(hb / ha);
    return p->constant + 0.5 * (p->dof + 1) * log_spread;
}

static double slope_at(const pair *p, double t)
{
    double ha = hypot(p->root_dof * p->sa, t - p->apart), hb = hypot(p->root_dof * p->sb, t);
    double lead = -p->apart * (t / hb) * (t / ha), linear = p->middle * (t / hb) / ha;
    double rest = p->apart * (p->root_dof * p->sb / hb) * (p->root_dof * p->sb / ha);
    return (p->dof + 1) * (lead + linear + rest) / ha / hb;
}

static bool ratio(const lm_term *a, const lm_term *b, double low, double high, lm_range *value, lm_range *slope)
{
    if (a->shape[DOF] != b->shape[DOF])
        return false;
    double sa = fabs(a->scale), sb = fabs(b->scale), dof = a->shape[DOF], apart = a->shift - b->shift;
    pair p = {
        .constant = a->log_weight - b->log_weight - log1p((sa - sb) / sb),
        .dof = dof,
        .root_dof = sqrt(dof),
        .sa = sa,
        .sb = sb,
        .apart = apart,
        .middle = dof * (sa - sb) * (sa + sb) + apart * apart,
    };
    /* Farther out than any y that a double holds the ratio no longer changes. */
    double farthest = 0.25 * DBL_MAX * fmin(1, fmin(sa, sb));
    double first = fmin(fmax(low - b->shift, -farthest), farthest);
    double last = fmin(fmax(high - b->shift, -farthest), farthest), at_first = ratio_at(&p, first);
    if (first == last) {
        double steep = slope_at(&p, first);
        *value = (lm_range){at_first, at_first};
        *slope = (lm_range){steep, steep};
        return true;
    }
    double at_last = ratio_at(&p, last), turn[2] = {0, 0};
    size_t turns = 0;
    *value = (lm_range){fmin(at_first, at_last), fmax(at_first, at_last)};
    if (apart != 0) { /* roots of opposite signs, their product -dof s_b^2 */
        double q = 0.5 * (p.middle + copysign(hypot(p.middle, 2 * apart * p.root_dof * sb), p.middle));
        turn[turns++] = q / apart;
        turn[turns++] = -apart * dof * sb / q * sb;
    } else if (sa != sb) {
        turn[turns++] = 0;
    }
    bool still = false;
    for (size_t k = 0; k < turns; k++)
        if (turn[k] > first && turn[k] < last) {
            double there = ratio_at(&p, turn[k]);
            value->low = fmin(value->low, there);
            value->high = fmax(value->high, there);
            still = true;
        }
    /* Loose, from the two scores; its sign is sure where nothing is stationary inside. */
    double ya = (first - apart) / sa, za = (last - apart) / sa;
    lm_range of_a = score_range(a, ya, za), of_b = score_range(b, first / sb, last / sb);
    *slope = (lm_range){of_a.low / sa - of_b.high / sb, of_a.high / sa - of_b.low / sb};
    if (!still && at_last > at_first)
        slope->low = fmax(slope->low, 0);
    if (!still && at_last < at_first)
        slope->high = fmin(slope->high, 0);
    return true;
}

const lm_family lm_family_student_t = {
    .name = "student_t",
    .parameter = {{"loc", LM_ANY}, {"scale", LM_POSITIVE}, {"dof", LM_POSITIVE}},
    .make = make,
    .log_pdf = log_pdf,
    .log_cdf = log_cdf,
    .log_sf = log_sf,
    .quantile = quantile,
    .moments = moments,
    .support = support,
    .landmarks = landmarks,
    .score_range = score_range,
    .tail_range = tail_range,
    .ratio = ratio,
};

const lm_family lm_family_cauchy = {
    .name = "cauchy",
    .parameter = {{"loc", LM_ANY}, {"scale", LM_POSITIVE}},
    .make = make_cauchy,
};
