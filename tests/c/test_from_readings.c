/* The density fitted to readings: its law by independent quadrature, round trip, refusals, allocations that fail. */
#include <math.h>
#include <stdlib.h>

#include "check.h"
#include "density/family.h"
#include "limen.h"
#include "numeric/memory.h"

enum { COUNT = 5000 };

/* Uniform on 0..1, from D. H. Lehmer's generator with the constants of S. K. Park and K. W. Miller, 1988. */
static double uniform(void)
{
    static uint64_t state = 20231;
    state = state * 48271 % 2147483647;
    return (double)state / 2147483647;
}

/* A logistic hump, and one reading in ten from a far one. */
static void fill(double readings[], size_t n, double step)
{
    for (size_t i = 0; i < n; i++) {
        double u = uniform(), x = log(u / (1 - u)) + (uniform() < 0.1 ? 40 : 0);
        readings[i] = step > 0 ? step * round(x / step) : x;
    }
}

static double at(lm_status (*function)(const lm_density *, const double *, double *, size_t), const lm_density *density,
                 double x)
{
    double out = NAN;
    CHECK(function(density, &x, &out, 1) == LM_OK);
    return out;
}

/* Simpson's rule, fine enough that its error is below 1e-12 on a smooth stretch. */
static double integral(const lm_density *density, double low, double high)
{
    enum { PARTS = 2000 };
    double sum = 0, h = (high - low) / PARTS;
    for (int i = 0; i <= PARTS; i++)
        sum += (i == 0 || i == PARTS ? 1 : i % 2 == 1 ? 4 : 2) *
               exp(at(lm_density_log_pdf, density, i == PARTS ? high : low + h * i));
    return sum * h / 3;
}

static void check_law(const lm_density *density)
{
    lm_spline_law law;
    CHECK(lm_density_spline_law(density, &law));
    double body = 0;
    for (size_t i = 0; i + 1 < law.knots; i++) {
        double low = law.knot[i], high = law.knot[i + 1], middle = low + 0.4 * (high - low), mass;
        double part = integral(density, low, high), first = integral(density, low, middle);
        body += part;
        CHECK(lm_density_log_mass(density, low, middle, &mass) == LM_OK);
        CHECK_CLOSE(exp(mass), first, 1e-10);
        CHECK_CLOSE(exp(at(lm_density_log_cdf, density, high)) - exp(at(lm_density_log_cdf, density, low)), part, 1e-9);
    }
    double below = exp(at(lm_density_log_cdf, density, law.knot[0]));
    double above = exp(at(lm_density_log_sf, density, law.knot[law.knots - 1]));
    CHECK_CLOSE(below + body + above, 1, 1e-10);
    CHECK_CLOSE(below, exp(at(lm_density_log_pdf, density, law.knot[0])) * law.tail_scale[0], 1e-13);
    for (double log_p = -1e-3; log_p > -1e8; log_p *= 7.3)
        for (int upper = 0; upper < 2; upper++) {
            double x;
            CHECK(lm_density_quantile(density, log_p, upper, &x) == LM_OK);
            if (isfinite(x)) /* a power tail leaves the doubles before its probability does */
                CHECK_CLOSE(at(upper ? lm_density_log_sf : lm_density_log_cdf, density, x), log_p, 1e-10);
        }
    /* the slopes and values of neighbouring formulas meet */
    const lm_term *term = &density->term[0];
    for (size_t i = 1; i + 1 < law.knots; i++) {
        double y = (law.knot[i] - term->shift) / term->scale, h = 1e-9;
        lm_range around = term->family->score_range(term, y - h, y + h);
        CHECK(around.high - around.low < 1e-6 * (1 + fabs(around.high)));
    }
}

/* Ranges of score, y * score and log ratio hold every value on their interval, and are reached. */
static void check_ranges(const lm_density *a, const lm_density *b)
{
    const lm_term *one = &a->term[0], *two = &b->term[0];
    double mark[512];
    size_t count = one->family->landmarks(one, mark, 256), pairs = 0;
    CHECK(count <= 256);
    for (size_t i = 0; i < count; i++)
        mark[i] = one->shift + one->scale * mark[i];
    size_t more = two->family->landmarks(two, mark + count, 256);
    for (size_t i = count; i < count + more; i++)
        mark[i] = two->shift + two->scale * mark[i];
    count += more;
    for (size_t i = 1; i < count; i++)
        for (size_t k = i; k > 0 && mark[k] < mark[k - 1]; k--) {
            double swap = mark[k];
            mark[k] = mark[k - 1];
            mark[k - 1] = swap;
        }
    for (size_t i = 0; i <= count; i++) {
        double low = i == 0 ? mark[0] - 1e4 : mark[i - 1], high = i == count ? mark[count - 1] + 1e4 : mark[i];
        lm_range ratio, slope;
        if (!(low < high))
            continue;
        double y0 = (low - one->shift) / one->scale, y1 = (high - one->shift) / one->scale;
        lm_range score = one->family->score_range(one, y0, y1), tail = one->family->tail_range(one, y0, y1);
        bool known = one->family->ratio(one, two, low, high, &ratio, &slope);
        double least = INFINITY, most = -INFINITY, steepest = -INFINITY;
        pairs += known;
        for (int k = 0; k <= 200; k++) {
            double x = low + (high - low) * k / 200, y = y0 + (y1 - y0) * k / 200;
            double s = one->family->score_range(one, y, y).low, room = 1e-9 * (1 + fabs(s));
            if (k > 0 && k < 200) {
                CHECK(s >= score.low - room && s <= score.high + room);
                CHECK(y * s >= tail.low - room * fabs(y) && y * s <= tail.high + room * fabs(y));
                steepest = fmax(steepest, s);
            }
            double r = lm_term_log_pdf(one, x) - lm_term_log_pdf(two, x);
            least = fmin(least, r);
            most = fmax(most, r);
            CHECK(!known || (r >= ratio.low - 1e-9 * (1 + fabs(r)) && r <= ratio.high + 1e-9 * (1 + fabs(r))));
        }
        if (known && i > 0 && i < count) { /* 200 samples of a cubic come within (1 / 200)^2 of its extremes */
            CHECK(most >= ratio.high - 1e-3 * (1 + fabs(most)));
            CHECK(least <= ratio.low + 1e-3 * (1 + fabs(least)));
        }
    }
    CHECK(pairs > 3);
}

static void check_round_trip(const lm_density *density)
{
    lm_spline_law law, again;
    lm_density *copy, *moved;
    CHECK(lm_density_spline_law(density, &law));
    CHECK(lm_density_spline(&law, &copy, NULL) == LM_OK);
    CHECK(lm_density_spline_law(copy, &again) && again.knots == law.knots && again.readings == COUNT);
    for (double x = -50; x < 90; x += 0.61)
        CHECK(at(lm_density_log_pdf, copy, x) == at(lm_density_log_pdf, density, x));
    CHECK(lm_density_moved(density, 1, -2, &moved, NULL) == LM_OK);
    CHECK(!lm_density_spline_law(moved, &again));
    CHECK_CLOSE(at(lm_density_log_pdf, moved, 1 - 2 * 0.37), at(lm_density_log_pdf, density, 0.37) - log(2), 1e-12);
    lm_density_release(moved);
    lm_density_release(copy);
}

static void refuse(double readings[], size_t n, lm_status wanted)
{
    lm_density *density = NULL;
    lm_fault fault = {.argument = NULL};
    CHECK(lm_density_from_readings(readings, n, &density, &fault) == wanted);
    CHECK(density == NULL && fault.argument != NULL);
}

static void check_refusals(void)
{
    double x[100], knot[3] = {0, 1, 2}, zero[3] = {0}, bad[3] = {0, 2, 1};
    lm_density *density = NULL;
    lm_fault fault;
    for (size_t i = 0; i < 100; i++)
        x[i] = 1;
    refuse(x, 3, LM_SIZE);
    refuse(x, 100, LM_SIZE);
    x[0] = 2;
    refuse(x, 100, LM_SIZE);
    x[50] = NAN;
    refuse(x, 100, LM_DOMAIN);
    for (size_t i = 0; i < 100; i++)
        x[i] = 1 + (double)(i % 8) * 0x1p-52;
    refuse(x, 100, LM_DOMAIN);
    for (size_t i = 0; i < 100; i++)
        x[i] = pow(10, 6 * (double)i - 300);
    refuse(x, 100, LM_DOMAIN);
    lm_spline_law law = {.knots = 3, .knot = bad, .log_density = zero, .slope = zero, .tail_scale = {1, 1}};
    CHECK(lm_density_spline(&law, &density, &fault) == LM_DOMAIN && fault.index == 2);
    law.knot = knot;
    law.tail_shape[1] = -0.1;
    CHECK(lm_density_spline(&law, &density, &fault) == LM_DOMAIN && fault.value == -0.1);
    law.tail_shape[1] = 0;
    law.tail_scale[0] = 0;
    CHECK(lm_density_spline(&law, &density, &fault) == LM_DOMAIN);
    law.knots = 1;
    CHECK(lm_density_spline(&law, &density, &fault) == LM_SIZE);
}

/* Flat between 0 and 2, exponential outside: everything about it is known. */
static void check_known(void)
{
    double knot[3] = {0, 1, 2}, zero[3] = {0}, mean, variance;
    lm_spline_law law = {.knots = 3, .knot = knot, .log_density = zero, .slope = zero, .tail_scale = {1, 2}};
    lm_density *density;
    CHECK(lm_density_spline(&law, &density, NULL) == LM_OK);
    CHECK_CLOSE(at(lm_density_log_pdf, density, 0.3), -log(5), 1e-15);
    CHECK_CLOSE(at(lm_density_log_cdf, density, -3), -3 - log(5), 1e-15);
    CHECK_CLOSE(at(lm_density_log_cdf, density, 1.25), log(2.25 / 5), 1e-15);
    CHECK_CLOSE(at(lm_density_log_sf, density, 8), log(2.0 / 5) - 3, 1e-15);
    CHECK(lm_density_moments(density, &mean, &variance) == LM_OK);
    CHECK_CLOSE(mean, (-1.0 + 2 + 2 * 4) / 5, 1e-14);                            /* parts of mass 1, 2, 2 */
    CHECK_CLOSE(variance + mean * mean, (2 + 8.0 / 3 + 2 * (4 + 8 + 8)) / 5, 1e-14); /* their second moments */
    lm_density_release(density);
    law.tail_shape[1] = 1;
    CHECK(lm_density_spline(&law, &density, NULL) == LM_OK);
    CHECK_CLOSE(at(lm_density_log_sf, density, 1e308), log(2.0 / 5 * 2) - log(1e308), 1e-14);
    CHECK(lm_density_moments(density, &mean, &variance) == LM_OK && mean == INFINITY && isnan(variance));
    lm_density_release(density);
}

int main(void)
{
    static double readings[COUNT], ticks[COUNT];
    lm_density *smooth, *stepped;
    lm_spline_law law;
    fill(readings, COUNT, 0);
    fill(ticks, COUNT, 0.25);
    CHECK(lm_density_from_readings(readings, COUNT, &smooth, NULL) == LM_OK);
    CHECK(lm_density_from_readings(ticks, COUNT, &stepped, NULL) == LM_OK);
    CHECK(lm_density_spline_law(smooth, &law) && law.step == 0);
    CHECK(lm_density_spline_law(stepped, &law) && law.step == 0.25);
    check_law(smooth);
    check_law(stepped);
    check_ranges(smooth, stepped);
    check_round_trip(smooth);
    check_refusals();
    check_known();
    lm_density_release(smooth);
    lm_density_release(stepped);
    lm_status status = LM_NO_MEMORY;
    for (size_t nth = 1; status != LM_OK; nth++) {
        lm_memory_fail_at(nth);
        status = lm_density_from_readings(readings, 200, &smooth, NULL);
        CHECK(status == LM_OK || status == LM_NO_MEMORY);
        if (status == LM_OK)
            lm_density_release(smooth);
        CHECK(lm_memory_live() == 0);
    }
    lm_memory_fail_at(0);
    lm_pareto_tail tail;
    CHECK(lm_pareto_fit(readings, COUNT, 42, &tail, NULL) == LM_OK && tail.readings > 0);
    CHECK(lm_pareto_fit(readings, COUNT, 1e9, &tail, NULL) == LM_SIZE);
    return check_report();
}
