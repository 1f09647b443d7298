/* Log-domain quadrature against integrals in closed form. 1e-14: some tens of roundings in a sum of 15 numbers. */
#include "check.h"
#include "numeric/logspace.h"
#include "numeric/memory.h"
#include "numeric/quadrature.h"

typedef struct {
    double rate;
} law;

/* exp(-rate |x|): a kink at 0. */
static bool peak(const void *context, const double x[], double out[], size_t n)
{
    for (size_t i = 0; i < n; i++)
        out[i] = -((const law *)context)->rate * fabs(x[i]);
    return true;
}

/* 1 / sqrt(x): no bound at 0. */
static bool root(const void *context, const double x[], double out[], size_t n)
{
    (void)context;
    for (size_t i = 0; i < n; i++)
        out[i] = -0.5 * log(x[i]);
    return true;
}

static bool jump(const void *context, const double x[], double out[], size_t n)
{
    (void)context;
    for (size_t i = 0; i < n; i++)
        out[i] = x[i] < 0.3 ? 0 : -INFINITY;
    return true;
}

static bool refuse(const void *context, const double x[], double out[], size_t n)
{
    (void)context, (void)x, (void)out, (void)n;
    return false;
}

static double integral(lm_log_function f, const void *context, double low, double high)
{
    lm_log_panels panels = LM_NO_PANELS;
    double total = -INFINITY, at = low;
    CHECK(lm_log_integrate(f, context, low, high, -INFINITY, &panels) == LM_OK);
    for (size_t i = 0; i < panels.count; i++) {
        CHECK(panels.panel[i].low == at); /* no gap, ascending */
        at = panels.panel[i].high;
        total = lm_log_add(total, panels.panel[i].log_mass);
    }
    CHECK(at == high);
    lm_log_panels_free(&panels);
    return total;
}

int main(void)
{
    law mild = {.rate = 1}, steep = {.rate = 1e5};
    CHECK_CLOSE(exp(integral(peak, &mild, 0, 40)), 1 - exp(-40.0), 1e-14);
    CHECK_CLOSE(exp(integral(peak, &mild, -1, 2)), 2 - exp(-1.0) - exp(-2.0), 1e-14); /* the kink inside */
    /* 700 to 800 decay lengths out: the absolute value of the logarithm is 7e7 */
    CHECK_CLOSE(integral(peak, &steep, 700, 800), -7e7 - log(1e5), 1e-15);
    CHECK_CLOSE(exp(integral(root, NULL, 1e-300, 1)), 2, 1e-14);
    CHECK_CLOSE(exp(integral(jump, NULL, 0, 1)), 0.3, 1e-14);
    CHECK(integral(jump, NULL, 0.5, 1) == -INFINITY);

    lm_log_panels panels = LM_NO_PANELS;
    double mass, error;
    CHECK(lm_log_rule(peak, &mild, 1, 2, &mass, &error) && error < 1e-11);
    CHECK_CLOSE(exp(mass), exp(-1.0) - exp(-2.0), 1e-15);
    CHECK(!lm_log_rule(refuse, NULL, 0, 1, &mass, &error));
    CHECK(lm_log_integrate(refuse, NULL, 0, 1, -INFINITY, &panels) == LM_CALLBACK);
    CHECK(lm_log_integrate(peak, &mild, 1, 1, -INFINITY, &panels) == LM_OK && panels.count == 0);
    lm_memory_fail_at(1);
    CHECK(lm_log_integrate(peak, &mild, 0, 1, -INFINITY, &panels) == LM_NO_MEMORY);
    lm_memory_fail_at(0);
    lm_log_panels_free(&panels);
    CHECK(lm_memory_live() == 0);
    return check_report();
}
