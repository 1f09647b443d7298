/* The one table that every density fills: what the layers above may ask of a term, and where the families are listed.
 *
 * A term is one member of a family, moved: reading = shift + scale * y, where y follows the family's standard law. The
 * functions of a family speak of y and of the standard law; moving, weighting, mixing, lattices and NaN are the
 * business of term.c and density.c. Inside the library a density is a list of weighted terms, and nothing else.
 */
#ifndef LM_FAMILY_H
#define LM_FAMILY_H

#include <stdatomic.h>

#include "../limen.h"

enum { LM_PARAMETERS = 6, LM_CONSTANTS = 8 };

typedef struct lm_family lm_family;
typedef struct lm_shared lm_shared;

/* Data of a term that does not fit in a few doubles (tables, callbacks, parts of a sum). Owned by count. */
struct lm_shared {
    atomic_size_t references; /* starts at 1, for the maker */
    void (*destroy)(lm_shared *shared);
};

typedef struct {
    const lm_family *family;
    double log_weight; /* of this term in its density; 0 in a density of one term */
    double shift;
    double scale;                  /* never 0; negative mirrors */
    double shape[LM_PARAMETERS];   /* the standard law's own parameters */
    double constant[LM_CONSTANTS]; /* prepared once by make, e.g. the log normaliser */
    lm_shared *data;               /* NULL for most */
} lm_term;

/* What a parameter may be; always finite. */
typedef enum { LM_ANY, LM_POSITIVE, LM_NONNEGATIVE, LM_PROBABILITY, LM_WHOLE } lm_domain;

typedef struct {
    const char *name;
    lm_domain domain;
} lm_parameter;

struct lm_family {
    const char *name;
    lm_parameter parameter[LM_PARAMETERS + 1]; /* a NULL name ends them; none for a family with data of its own */

    bool lattice;  /* masses on integer y, not a density; log_pdf is then a smooth continuation to the real y of its
                      support */
    bool fallible; /* calls out: NaN from any function below means failure */

    /* Fills shift, scale, shape and constant from checked parameters (each in its domain); the term comes zeroed but
     * for family and scale = 1. May choose another family for the term where the law is a special case of it. May
     * refuse what single domains cannot say (low < high). NULL for a family that is only made from data. */
    lm_status (*make)(const double parameters[], lm_term *term, lm_fault *fault);

    /* log density of the standard law at n values of y; -inf outside the support; y is never NaN, may be infinite. */
    void (*log_pdf)(const lm_term *term, const double y[], double out[], size_t n);

    /* log P(Y <= y) and log P(Y > y), each to full relative accuracy of the logarithm. */
    double (*log_cdf)(const lm_term *term, double y);
    double (*log_sf)(const lm_term *term, double y);

    /* log P(low < Y <= high) without cancellation, low < high; NULL: the difference in the smaller tail. */
    double (*log_mass)(const lm_term *term, double low, double high);

    /* y with log_cdf(y) = log_p, or log_sf(y) = log_p when upper, for any log_p < 0. NULL: solved from the tails. Not
     * asked of a lattice. */
    double (*quantile)(const lm_term *term, double log_p, bool upper);

    void (*moments)(const lm_term *term, double *mean, double *variance);

    /* The smallest closed interval with all the probability. */
    lm_range (*support)(const lm_term *term);

    /* Interior y at which log_pdf has a mode or a kink, or at which an integral must be split, ascending; writes at
     * most capacity of them and returns how many there are. Every kink and jump must be among them. NULL: none. */
    size_t (*landmarks)(const lm_term *term, double out[], size_t capacity);

    /* Range of the score d log_pdf / dy over low <= y <= high (inside the support, no kink strictly inside), as tight
     * as a closed form gives; with low == high the score itself. NULL: the search must sample, and says so. */
    lm_range (*score_range)(const lm_term *term, double low, double high);

    /* Range of y * score(y), likewise: for power tails, where it tends to a constant. NULL: nothing tighter is known.
     */
    lm_range (*tail_range)(const lm_term *term, double low, double high);

    /* For two terms of this family: ranges over the readings low <= x <= high (x, not y) of log f_a(x) - log f_b(x),
     * log weights and scales included, and of its derivative in x, without cancellation; with low == high the values.
     * Half-infinite slopes are allowed where only the sign is known. False where this pair has no closed form
     * (different shapes, say). NULL: never. */
    bool (*ratio)(const lm_term *a, const lm_term *b, double low, double high, lm_range *ratio, lm_range *slope);
};

/* The families: one line here, one file, one `const lm_family lm_family_<name>`. */
#define LM_FAMILIES(X)                                                                                                 \
    X(gaussian) X(laplace) X(student_t) X(cauchy) X(uniform) X(exponential) X(gamma) X(chi_square) X(poisson)          \
    X(point) X(from_readings) X(custom)

#define LM_DECLARE(name) extern const lm_family lm_family_##name;
LM_FAMILIES(LM_DECLARE)
#undef LM_DECLARE

/* ---- terms ---- */

/* A member of a family: checks the parameters, calls make. On success the term owns its data. */
LM_MUST_USE lm_status lm_term_make(const lm_family *family, const double parameters[], size_t count, lm_term *out,
                                   lm_fault *fault);

/* Copying a term shares its data; each copy is released once. */
lm_term lm_term_retain(const lm_term *term);
void lm_term_release(lm_term *term);

/* y of a reading, snapped to the integer it stands for on a lattice. */
double lm_term_standard(const lm_term *term, double x);

/* In readings: the support; log of weight times density (a lattice's continuation), and the score d/dx. */
lm_range lm_term_support(const lm_term *term);
double lm_term_log_pdf(const lm_term *term, double x);
double lm_term_score(const lm_term *term, double x);

/* log P(X < x), P(X <= x), P(X > x), P(X >= x) and P(low <= X < high) of the term alone, its weight left out. */
double lm_term_log_below(const lm_term *term, double x);
double lm_term_log_cdf(const lm_term *term, double x);
double lm_term_log_sf(const lm_term *term, double x);
double lm_term_log_from(const lm_term *term, double x);
double lm_term_log_mass(const lm_term *term, double low, double high);

/* ---- densities ---- */

struct lm_density {
    atomic_size_t references;
    size_t count;
    lm_term term[];
};

/* A density of one term, which it takes over (also on failure). */
LM_MUST_USE lm_status lm_density_of_term(lm_term *term, lm_density **out);

#endif
