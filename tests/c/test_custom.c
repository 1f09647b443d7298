/* A law of a caller's function: its tails, its failures, and who owns the context. */
#include "check.h"
#include "limen.h"
#include "numeric/memory.h"

typedef struct {
    int calls, fail_at, released;
} caller;

/* exp(-x) from 0 up. */
static bool decay(void *context, const double x[], double out[], size_t n)
{
    caller *c = context;
    c->calls++;
    for (size_t i = 0; i < n; i++)
        out[i] = c->calls == c->fail_at && c->fail_at % 2 == 0 ? NAN : -x[i];
    return c->calls != c->fail_at || c->fail_at % 2 == 0;
}

static void let_go(void *context)
{
    ((caller *)context)->released++;
}

int main(void)
{
    const lm_range support = {0, INFINITY};
    caller fine = {0};
    lm_density *d = NULL;
    CHECK(lm_density_custom(decay, &fine, let_go, support, &d, NULL) == LM_OK);
    double x[] = {-1, 0.5, 30, 800, 1e5}, tail[5], mean, variance;
    CHECK(lm_density_log_sf(d, x, tail, 5) == LM_OK);
    for (int i = 0; i < 5; i++)
        CHECK_CLOSE(tail[i], x[i] < 0 ? 0 : -x[i], 1e-13); /* the policy for logarithms of probabilities */
    CHECK(lm_density_log_cdf(d, x, tail, 5) == LM_OK && tail[0] == -INFINITY);
    CHECK_CLOSE(tail[1], log(-expm1(-0.5)), 1e-13);
    CHECK(lm_density_moments(d, &mean, &variance) == LM_OK);
    CHECK_CLOSE(mean, 1, 1e-13);
    CHECK_CLOSE(variance, 1, 1e-13);
    double between; /* a narrow stretch, where tails would cancel: its width rounds to 1e-7 */
    CHECK(lm_density_log_mass(d, 1, 1 + 1e-9, &between) == LM_OK);
    CHECK_CLOSE(between, -1 + log(1e-9), 1e-8);
    fine.fail_at = fine.calls + 1;
    CHECK(lm_density_log_sf(d, x, tail, 5) == LM_CALLBACK);
    fine.fail_at = fine.calls + 1 + fine.calls % 2;
    while (fine.calls < fine.fail_at)
        (void)!lm_density_log_pdf(d, &x[1], tail, 1);
    CHECK(lm_density_log_sf(d, &x[1], tail, 1) == LM_OK); /* and goes on afterwards */
    int calls = fine.calls;
    CHECK(fine.released == 0);
    lm_density_release(d);
    CHECK(fine.released == 1);

    for (int at = 1; at < calls; at = at * 5 / 4 + 1) { /* whenever it fails */
        caller failing = {.fail_at = at};
        lm_status status = lm_density_custom(decay, &failing, let_go, support, &d, NULL);
        CHECK(status == LM_CALLBACK || failing.calls < at);
        if (status == LM_OK)
            lm_density_release(d);
        CHECK(failing.released == 1);
    }
    lm_status status = LM_NO_MEMORY;
    for (size_t nth = 1; status == LM_NO_MEMORY; nth++) {
        caller c = {0};
        lm_memory_fail_at(nth);
        status = lm_density_custom(decay, &c, let_go, support, &d, NULL);
        lm_memory_fail_at(0);
        if (status == LM_OK)
            lm_density_release(d);
        CHECK(c.released == 1);
        CHECK(status == LM_OK || status == LM_NO_MEMORY);
    }
    CHECK(status == LM_OK);
    lm_fault fault;
    caller c = {0};
    CHECK(lm_density_custom(decay, &c, let_go, (lm_range){1, INFINITY}, &d, &fault) == LM_DOMAIN);
    CHECK_CLOSE(fault.value, exp(-1), 1e-12);
    CHECK(lm_density_custom(decay, &c, let_go, (lm_range){1, NAN}, &d, &fault) == LM_DOMAIN && c.released == 2);
    CHECK(lm_memory_live() == 0);
    return check_report();
}
