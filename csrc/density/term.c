/* One term: parameters checked, readings carried to the standard law and back, lattices snapped, tails of a move. */
#include <float.h>
#include <math.h>

#include "../numeric/fault.h"
#include "../numeric/logspace.h"
#include "family.h"

static const char *expectation(lm_domain domain)
{
    switch (domain) {
    case LM_POSITIVE:
        return "a finite number > 0";
    case LM_NONNEGATIVE:
        return "a finite number >= 0";
    case LM_PROBABILITY:
        return "a number from 0 to 1";
    case LM_WHOLE:
        return "a whole number >= 0";
    default:
        return "a finite number";
    }
}

static bool in_domain(lm_domain domain, double value)
{
    if (!isfinite(value))
        return false;
    switch (domain) {
    case LM_POSITIVE:
        return value > 0;
    case LM_NONNEGATIVE:
        return value >= 0;
    case LM_PROBABILITY:
        return value >= 0 && value <= 1;
    case LM_WHOLE:
        return value >= 0 && value == floor(value) && value <= 0x1p53;
    default:
        return true;
    }
}

lm_status lm_term_make(const lm_family *family, const double parameters[], size_t count, lm_term *out, lm_fault *fault)
{
    size_t wanted = 0;
    while (family->parameter[wanted].name != NULL)
        wanted++;
    if (count != wanted || family->make == NULL)
        return lm_refuse(fault, LM_SIZE, "parameters", (double)count, -1, "one value for each parameter of the family");
    for (size_t i = 0; i < count; i++) {
        const lm_parameter *p = &family->parameter[i];
        if (!in_domain(p->domain, parameters[i]))
            return lm_refuse(fault, LM_DOMAIN, p->name, parameters[i], -1, expectation(p->domain));
    }
    *out = (lm_term){.family = family, .scale = 1};
    return family->make(parameters, out, fault);
}

lm_term lm_term_retain(const lm_term *term)
{
    if (term->data != NULL)
        atomic_fetch_add_explicit(&term->data->references, 1, memory_order_relaxed);
    return *term;
}

void lm_term_release(lm_term *term)
{
    if (term->data != NULL && atomic_fetch_sub_explicit(&term->data->references, 1, memory_order_acq_rel) == 1)
        term->data->destroy(term->data);
    term->data = NULL;
}

double lm_term_standard(const lm_term *term, double x)
{
    double y = (x - term->shift) / term->scale;
    if (term->family->lattice) {
        /* shift + scale * k rounds, and so does the way back: at most 4 units of the larger of the two numbers. */
        double whole = round(y);
        if (fabs(y - whole) <= 4 * DBL_EPSILON * fmax(fabs(whole), fabs(term->shift / term->scale)))
            return whole;
    }
    return y;
}

lm_range lm_term_support(const lm_term *term)
{
    lm_range y = term->family->support(term);
    double low = isinf(y.low) ? copysign(INFINITY, y.low * term->scale) : term->shift + term->scale * y.low;
    double high = isinf(y.high) ? copysign(INFINITY, y.high * term->scale) : term->shift + term->scale * y.high;
    return term->scale > 0 ? (lm_range){low, high} : (lm_range){high, low};
}

/* d reading / d y turns a density in y into one in readings; masses stay. */
static double log_jacobian(const lm_term *term)
{
    return term->family->lattice || term->scale == 1 ? 0 : log(fabs(term->scale));
}

double lm_term_log_pdf(const lm_term *term, double x)
{
    double y = (x - term->shift) / term->scale, value;
    term->family->log_pdf(term, &y, &value, 1);
    return term->log_weight + value - log_jacobian(term);
}

double lm_term_score(const lm_term *term, double x)
{
    double y = (x - term->shift) / term->scale;
    return term->family->score_range(term, y, y).low / term->scale;
}

/* P(Y < y): on a lattice the integers below y, else P(Y <= y). */
static double log_below(const lm_term *term, double y)
{
    return term->family->log_cdf(term, term->family->lattice ? ceil(y) - 1 : y);
}

static double log_from(const lm_term *term, double y)
{
    return term->family->log_sf(term, term->family->lattice ? ceil(y) - 1 : y);
}

static double log_upto(const lm_term *term, double y)
{
    return term->family->log_cdf(term, term->family->lattice ? floor(y) : y);
}

static double log_beyond(const lm_term *term, double y)
{
    return term->family->log_sf(term, term->family->lattice ? floor(y) : y);
}

double lm_term_log_below(const lm_term *term, double x)
{
    double y = lm_term_standard(term, x);
    return term->scale > 0 ? log_below(term, y) : log_beyond(term, y);
}

double lm_term_log_cdf(const lm_term *term, double x)
{
    double y = lm_term_standard(term, x);
    return term->scale > 0 ? log_upto(term, y) : log_from(term, y);
}

double lm_term_log_sf(const lm_term *term, double x)
{
    double y = lm_term_standard(term, x);
    return term->scale > 0 ? log_beyond(term, y) : log_below(term, y);
}

double lm_term_log_from(const lm_term *term, double x)
{
    double y = lm_term_standard(term, x);
    return term->scale > 0 ? log_from(term, y) : log_upto(term, y);
}

/* log P(low < Y <= high), from whichever tail is smaller. */
static double mass_between(const lm_term *term, double low, double high)
{
    const lm_family *family = term->family;
    if (!(low < high))
        return -INFINITY;
    if (family->log_mass != NULL)
        return family->log_mass(term, low, high);
    double below = family->log_cdf(term, low), beyond = family->log_sf(term, high);
    if (below == -INFINITY)
        return family->log_cdf(term, high);
    if (beyond == -INFINITY)
        return family->log_sf(term, low);
    return below < beyond ? lm_log_sub(family->log_cdf(term, high), below)
                          : lm_log_sub(family->log_sf(term, low), beyond);
}

double lm_term_log_mass(const lm_term *term, double low, double high)
{
    if (!(low < high))
        return -INFINITY;
    double a = lm_term_standard(term, low), b = lm_term_standard(term, high);
    if (!term->family->lattice)
        return term->scale > 0 ? mass_between(term, a, b) : mass_between(term, b, a);
    /* low <= X < high on the lattice: above ceil(a) - 1 up to ceil(b) - 1; mirrored: above floor(b) up to floor(a). */
    return term->scale > 0 ? mass_between(term, ceil(a) - 1, ceil(b) - 1) : mass_between(term, floor(b), floor(a));
}
