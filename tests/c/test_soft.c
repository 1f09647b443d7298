/* Soft values: the table against the exact function at every kind of reading, for laws easy and hard. */
#include <stdlib.h>
#include <string.h>

#include "check.h"
#include "limen.h"
#include "numeric/memory.h"

static uint64_t seed = 0x9e3779b97f4a7c15u;

static uint64_t draw(void)
{
    seed ^= seed >> 12;
    seed ^= seed << 25;
    seed ^= seed >> 27;
    return seed * 0x2545f4914f6cdd1du;
}

/* The largest error relative to max(1, |LLR|). */
static double worse(double worst, double got, double wanted)
{
    if (isnan(wanted) || isinf(wanted))
        return (isnan(wanted) && isnan(got)) || got == wanted ? worst : INFINITY;
    return fmax(worst, fabs(got - wanted) / fmax(1, fabs(wanted)));
}

static lm_density *gaussians(const double weights[], const double parameters[][2], size_t count)
{
    lm_density *part[8] = {NULL}, *mixture = NULL;
    for (size_t i = 0; i < count; i++)
        CHECK(lm_density_new("gaussian", parameters[i], 2, &part[i], NULL) == LM_OK);
    CHECK(lm_density_mixture(weights, (const lm_density *const *)part, count, &mixture, NULL) == LM_OK);
    for (size_t i = 0; i < count; i++)
        lm_density_release(part[i]);
    return mixture;
}

enum { N = 40000 };

static void check_pair(const char *what, lm_density *a, lm_density *b, double centre, double scale)
{
    static float x[N], y[N];
    static double wide[N], exact[N], got[N];
    lm_log_ratio *ratio;
    lm_soft *soft;
    CHECK(lm_log_ratio_new(a, b, &ratio, NULL) == LM_OK);
    CHECK(lm_log_ratio_compile(ratio, &soft) == LM_OK);
    for (size_t i = 0; i < N; i++) {
        const double u = (double)(draw() >> 11) * 0x1p-52 - 1;
        uint32_t bits = (uint32_t)draw();
        memcpy(&x[i], &bits, sizeof bits); /* any float at all, or near by, or the tails */
        if (i % 4 != 0)
            x[i] = (float)(i % 4 == 1 ? centre + 8 * scale * u : centre + scale * sinh(40 * u));
        wide[i] = (double)x[i];
    }
    CHECK(lm_log_ratio_values(ratio, wide, exact, N) == LM_OK);
    CHECK(lm_soft_values(soft, LM_F32, x, sizeof *x, false, N, LM_SOFT_F32, 1, y, sizeof *y) == LM_OK);
    double worst = 0;
    for (size_t i = 0; i < N; i++)
        worst = worse(worst, (double)y[i], (double)(float)exact[i]);
    CHECK(worst <= 1e-6);
    const double single = worst;
    for (size_t i = 0; i < N; i++)
        wide[i] *= 1 + 0x1p-40 * (double)(draw() % 1000);
    CHECK(lm_log_ratio_values(ratio, wide, exact, N) == LM_OK);
    CHECK(lm_soft_values(soft, LM_F64, wide, sizeof *wide, false, N, LM_SOFT_F64, 1, got, sizeof *got) == LM_OK);
    worst = 0;
    for (size_t i = 0; i < N; i++)
        worst = worse(worst, got[i], exact[i]);
    CHECK(worst <= 1e-6);
    if (getenv("LIMEN_VERBOSE") != NULL)
        printf("%-12s %3zu segments over [%g, %g], worst %.2e single, %.2e double\n", what, lm_soft_segments(soft),
               lm_soft_span(soft).low, lm_soft_span(soft).high, single, worst);
    lm_soft_free(soft);
    lm_log_ratio_free(ratio);
    lm_density_release(a);
    lm_density_release(b);
}

/* Three states: posteriors are in [0, 1], sum to 1, and follow from the log densities. */
static void check_posteriors(void)
{
    lm_density *state[3] = {gaussians((double[]){1}, (double[][2]){{0, 1}}, 1),
                            gaussians((double[]){1}, (double[][2]){{1.5, 0.5}}, 1),
                            gaussians((double[]){0.5, 0.5}, (double[][2]){{4, 1}, {3, 3}}, 2)};
    const double prior[3] = {0.2, 0.5, 0.3};
    enum { FEW = 3000 };
    static double x[FEW], sum[FEW], p[FEW], exact[FEW], log_pdf[3][FEW];
    for (size_t i = 0; i < FEW; i++)
        x[i] = -12 + 24.0 * (double)i / FEW;
    for (size_t k = 0; k < 3; k++)
        CHECK(lm_density_log_pdf(state[k], x, log_pdf[k], FEW) == LM_OK);
    for (size_t k = 0; k < 3; k++) {
        lm_log_ratio *ratio;
        lm_soft *soft;
        CHECK(lm_posterior_new((const lm_density *const *)state, prior, 3, k, &ratio, NULL) == LM_OK);
        CHECK(lm_log_ratio_compile(ratio, &soft) == LM_OK);
        CHECK(lm_soft_values(soft, LM_F64, x, sizeof *x, false, FEW, LM_SOFT_F64, 1, p, sizeof *p) == LM_OK);
        CHECK(lm_log_ratio_values(ratio, x, exact, FEW) == LM_OK);
        double worst = 0, worst_exact = 0;
        for (size_t i = 0; i < FEW; i++) {
            double all = 0;
            for (size_t j = 0; j < 3; j++)
                all += prior[j] * exp(log_pdf[j][i]);
            const double wanted = prior[k] * exp(log_pdf[k][i]) / all;
            worst = fmax(worst, fabs(p[i] - wanted));
            worst_exact = fmax(worst_exact, fabs(exact[i] - wanted));
            sum[i] += p[i];
        }
        CHECK(worst <= 1e-6);
        CHECK(worst_exact <= 1e-13); /* a few roundings of logarithms near 70 */
        lm_soft_free(soft);
        lm_log_ratio_free(ratio);
    }
    double worst = 0;
    for (size_t i = 0; i < FEW; i++)
        worst = fmax(worst, fabs(sum[i] - 1));
    CHECK(worst <= 3e-6);
    lm_log_ratio *none;
    lm_fault fault;
    CHECK(lm_posterior_new((const lm_density *const *)state, (double[]){0.5, -1, 1.5}, 3, 0, &none, &fault) ==
          LM_DOMAIN);
    CHECK(none == NULL && fault.index == 1);
    for (size_t k = 0; k < 3; k++)
        lm_density_release(state[k]);
}

static void check_allocations(void)
{
    lm_density *a = gaussians((double[]){1}, (double[][2]){{0, 1}}, 1);
    lm_density *b = gaussians((double[]){0.5, 0.5}, (double[][2]){{2, 1}, {3, 0.25}}, 2);
    const size_t before = lm_memory_live();
    lm_status status = LM_NO_MEMORY;
    for (size_t nth = 1; status != LM_OK; nth += nth < 20 ? 1 : nth / 4) {
        lm_log_ratio *ratio = NULL;
        lm_soft *soft = NULL;
        lm_memory_fail_at(nth);
        status = lm_log_ratio_new(a, b, &ratio, NULL);
        if (status == LM_OK)
            status = lm_log_ratio_compile(ratio, &soft);
        CHECK(status == LM_OK || status == LM_NO_MEMORY);
        lm_soft_free(soft);
        lm_log_ratio_free(ratio);
        CHECK(lm_memory_live() == before);
    }
    lm_memory_fail_at(0);
    lm_density_release(a);
    lm_density_release(b);
}

int main(void)
{
    check_pair("equal", gaussians((double[]){1}, (double[][2]){{0, 1}}, 1),
               gaussians((double[]){1}, (double[][2]){{2, 1}}, 1), 1, 1);
    check_pair("unequal", gaussians((double[]){1}, (double[][2]){{0, 1}}, 1),
               gaussians((double[]){1}, (double[][2]){{2, 0.125}}, 1), 1, 1);
    check_pair("mixtures", gaussians((double[]){0.9, 0.1}, (double[][2]){{0, 1}, {0.5, 4}}, 2),
               gaussians((double[]){0.8, 0.2}, (double[][2]){{3, 0.7}, {2.5, 3}}, 2), 1.5, 2);
    check_pair("spike", gaussians((double[]){0.9, 0.1}, (double[][2]){{0, 1}, {5, 1e-4}}, 2),
               gaussians((double[]){1}, (double[][2]){{2, 1}}, 1), 1, 1);
    check_pair("far", gaussians((double[]){1}, (double[][2]){{1e6, 1}}, 1),
               gaussians((double[]){0.5, 0.5}, (double[][2]){{1e6 + 3, 0.5}, {1e6 + 4, 2}}, 2), 1e6, 2);
    check_pair("hair", gaussians((double[]){1}, (double[][2]){{1e6, 1e-3}}, 1),
               gaussians((double[]){1}, (double[][2]){{1e6 + 0.003, 1e-3}}, 1), 1e6, 0.01);
    check_pair("comb",
               gaussians((double[]){0.25, 0.25, 0.25, 0.25}, (double[][2]){{0, 0.1}, {2, 0.1}, {4, 0.1}, {6, 0.1}}, 4),
               gaussians((double[]){0.25, 0.25, 0.25, 0.25}, (double[][2]){{1, 0.1}, {3, 0.1}, {5, 0.1}, {7, 0.1}}, 4),
               3.5, 3);
    check_posteriors();
    check_allocations();
    return check_report();
}
