/* limen: decision levels for scalar readings, found exactly, assessed in both tails, applied at the speed of memory.
 *
 * This file is the public interface of the C library. A density is the law of the reading in one state; states with
 * priors and costs give a rule (ordered levels, and the decision between them); a rule is assessed against densities
 * and applied to arrays. Every function that can fail returns an lm_status and says what its outputs hold then; a
 * function that cannot fail returns its value. Nothing prints, aborts, or keeps state between calls. Probabilities
 * are natural logarithms. A level belongs to the interval on its right.
 */
#ifndef LIMEN_H
#define LIMEN_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "numeric/compiler.h"

#define LM_VERSION "0.1.0"

/* ---- status and fault -------------------------------------------------------------------------------------------
 * The one list of what can go wrong: code, kind (which decides the Python exception), and the English sentence.
 */
#define LM_STATUSES(X)                                                                                                 \
    X(OK, NONE, "done")                                                                                                \
    X(DOMAIN, ARGUMENT, "parameter outside its domain")                                                                \
    X(SIZE, ARGUMENT, "array sizes do not fit together")                                                               \
    X(MIXED, ARGUMENT, "counts and continuous readings cannot be compared")                                            \
    X(UNKNOWN, ARGUMENT, "unknown name")                                                                               \
    X(NO_MEMORY, MEMORY, "out of memory")                                                                              \
    X(CALLBACK, CALLBACK, "a callback failed")                                                                         \
    X(UNRESOLVED, INTERNAL, "the search left a piece undecided")                                                       \
    X(NO_CONVERGENCE, INTERNAL, "an iteration did not converge")

#define LM_STATUS_CODE(code, kind, text) LM_##code,
typedef enum { LM_STATUSES(LM_STATUS_CODE) LM_STATUS_END } lm_status;
#undef LM_STATUS_CODE

typedef enum { LM_KIND_NONE, LM_KIND_ARGUMENT, LM_KIND_MEMORY, LM_KIND_CALLBACK, LM_KIND_INTERNAL } lm_kind;

/* The sentence and the kind of a status; cannot fail. */
LM_API const char *lm_status_text(lm_status status);
LM_API lm_kind lm_status_kind(lm_status status);

/* What was wrong with an argument. Filled only on failure, and only where the caller passes one (NULL is allowed).
 * The strings are static; index is the place in an array argument, or -1. */
typedef struct {
    const char *argument;
    const char *expected;
    double value;
    ptrdiff_t index;
} lm_fault;

/* A closed interval of doubles. */
typedef struct {
    double low;
    double high;
} lm_range;

/* ---- density: the law of the reading in one state --------------------------------------------------------------
 *
 *     lm_density *bottle;
 *     double parameters[] = {1.31, 0.07};
 *     lm_status status = lm_density_new("gaussian", parameters, 2, &bottle, NULL);
 *     ...
 *     lm_density_release(bottle);
 *
 * A density is immutable, counted by references, and safe to share between threads. Counts (Poisson and kin) and
 * points have probability masses where the others have densities.
 */
typedef struct lm_density lm_density;

/* A member of a built-in family by name, with its parameters in the order of lm_family_parameter; *out is set only on
 * success and is the caller's to release. */
LM_API LM_MUST_USE lm_status lm_density_new(const char *family, const double parameters[], size_t count,
                                            lm_density **out, lm_fault *fault);

/* A mixture; weights >= 0 that sum to 1 within 1e-9 (they are divided by their sum). The parts are copied. */
LM_API LM_MUST_USE lm_status lm_density_mixture(const double weights[], const lm_density *const parts[], size_t count,
                                                lm_density **out, lm_fault *fault);

/* The law of shift + scale * reading; scale != 0, and negative mirrors. */
LM_API LM_MUST_USE lm_status lm_density_moved(const lm_density *density, double shift, double scale, lm_density **out,
                                              lm_fault *fault);

/* One more owner, one less; both take NULL and cannot fail. The last release frees. */
LM_API lm_density *lm_density_retain(const lm_density *density);
LM_API void lm_density_release(lm_density *density);

/* Over n readings: log density (log mass for counts), log P(X <= x), log P(X > x). NaN gives NaN. Fails only with
 * LM_CALLBACK (a density that calls out and got NaN or worse); out then holds unspecified numbers. */
LM_API LM_MUST_USE lm_status lm_density_log_pdf(const lm_density *density, const double x[], double out[], size_t n);
LM_API LM_MUST_USE lm_status lm_density_log_cdf(const lm_density *density, const double x[], double out[], size_t n);
LM_API LM_MUST_USE lm_status lm_density_log_sf(const lm_density *density, const double x[], double out[], size_t n);

/* log P(low <= X < high), each interval from whichever tail is smaller; -inf when low >= high. */
LM_API LM_MUST_USE lm_status lm_density_log_mass(const lm_density *density, double low, double high, double *out);

/* The smallest reading whose log_cdf is >= log_p (upper: whose log_sf is <= log_p), from log probabilities <= 0, so
 * that both tails are reached as far as logarithms of probabilities go. */
LM_API LM_MUST_USE lm_status lm_density_quantile(const lm_density *density, double log_p, bool upper, double *out);

/* Mean and variance; NaN where they do not exist, inf where they diverge. */
LM_API LM_MUST_USE lm_status lm_density_moments(const lm_density *density, double *mean, double *variance);

/* The smallest closed interval with all the probability; whether readings are counts (or points) only. */
LM_API lm_range lm_density_support(const lm_density *density);
LM_API bool lm_density_discrete(const lm_density *density);

/* The law of from_readings: between the first and the last knot the logarithm of the density is, on each piece, the
 * cubic with the given values and slopes at its ends; beyond them it falls like the generalized Pareto law with the
 * given scale and shape >= 0 (0 is exponential), below [0] and above [1]. It need not be normalised. The numbers after
 * that say what it was fitted to, and change nothing; all may be 0. */
typedef struct {
    size_t knots; /* at least 2 */
    const double *knot; /* ascending */
    const double *log_density;
    const double *slope;
    double tail_scale[2];
    double tail_shape[2];
    double readings;            /* how many there were */
    double tail_readings[2];    /* how many of them below the first and above the last knot */
    double tail_shape_error[2]; /* standard errors of the shapes */
    double step;                /* of the lattice of the readings; 0: none */
} lm_spline_law;

/* The arrays are copied; *out is set only on success and is the caller's to release. */
LM_API LM_MUST_USE lm_status lm_density_spline(const lm_spline_law *law, lm_density **out, lm_fault *fault);

/* The law that such a density was made from, with arrays that live as long as it does; false for any other density,
 * also for one that was moved. Cannot fail. */
LM_API bool lm_density_spline_law(const lm_density *density, lm_spline_law *out);

/* A caller's function: log densities at n readings inside the support, -inf where there is none. False, or a NaN among
 * them, fails whatever asked. It must not change while the density lives, and is called from any thread that evaluates
 * the density. */
typedef bool (*lm_log_pdf_callback)(void *context, const double x[], double out[], size_t n);

/* The law of such a function. Where its mass is, is searched for when it is made; it must integrate to 1 within 1e-6.
 * release (NULL: none) is called once with context when the last owner goes, on failure too. No bounds are known of
 * such a law, so levels are sought by sampling, and lm_search says how finely. */
LM_API LM_MUST_USE lm_status lm_density_custom(lm_log_pdf_callback log_pdf, void *context, void (*release)(void *),
                                               lm_range support, lm_density **out, lm_fault *fault);

/* The table of families: names, and the name of each parameter (NULL past the last). */
LM_API size_t lm_family_count(void);
LM_API const char *lm_family_name(size_t family);
LM_API const char *lm_family_parameter(size_t family, size_t parameter);

/* ---- decide: where one decision gives way to another -------------------------------------------------------------
 *
 * How a search for levels went. It is exhaustive where neither `unresolved` nor `sampled` counts anything: every level
 * over all finite doubles is there, proven by bounds. `touches` counts places where two decisions come equally good
 * without changing over.
 */
typedef struct {
    size_t pieces; /* intervals on which bounds were judged */
    size_t touches;
    size_t unresolved; /* pieces at the resolution of doubles on which bounds left the sign open */
    size_t sampled;    /* pairs of decisions searched by sampling, because a density knows no bounds */
    double resolution; /* the widest gap between samples, in units of the smallest scale; 0 where none was sampled */
} lm_search;

/* Levels in ascending order, and the decision of each of the count + 1 intervals between them. */
typedef struct {
    size_t count;
    double *levels;
    size_t *decisions;
    lm_search search;
} lm_rule;

/* The rule of least prior-weighted cost. costs holds decisions rows of states numbers, row by row; NULL with decisions
 * = states is one for each wrong decision. Ties go to the lower index; where no state has density the decision of the
 * nearest support edge holds. *out is the caller's to free on success and holds nothing on failure. */
LM_API LM_MUST_USE lm_status lm_bayes(const lm_density *const densities[], const double priors[], size_t states,
                                      const double *costs, size_t decisions, lm_rule *out, lm_fault *fault);

/* NULL members are allowed. */
LM_API void lm_rule_free(lm_rule *rule);

/* log P(decision | state), decisions rows of states numbers. decisions_of holds count + 1 entries below decisions. */
LM_API LM_MUST_USE lm_status lm_transition(const double levels[], const size_t decisions_of[], size_t count,
                                           const lm_density *const densities[], size_t states, size_t decisions,
                                           double log_transition[]);

/* Prior-weighted cost of a transition matrix, as the logarithms of its positive and its negative part (costs may have
 * either sign). costs NULL: 1 for each wrong decision among the first `states`, 0 for decisions beyond them. */
LM_API void lm_log_risk(const double log_transition[], const double priors[], size_t states, const double *costs,
                        size_t decisions, double *log_positive, double *log_negative);

/* ---- slice: levels applied to arrays ---------------------------------------------------------------------------
 * The types a reading can have: name, C type. One list for kernels, loops and tests. LM_F16 is IEEE binary16, carried
 * as its bits.
 */
#define LM_READINGS(X)                                                                                                 \
    X(I8, i8, int8_t) X(U8, u8, uint8_t) X(I16, i16, int16_t) X(U16, u16, uint16_t) X(I32, i32, int32_t)               \
    X(U32, u32, uint32_t) X(I64, i64, int64_t) X(U64, u64, uint64_t) X(F16, f16, uint16_t) X(F32, f32, float)          \
    X(F64, f64, double)

#define LM_READING_CODE(code, name, type) LM_##code,
typedef enum { LM_READINGS(LM_READING_CODE) LM_READING_END } lm_reading;
#undef LM_READING_CODE

#define LM_MAX_LEVELS 254 /* codes are bytes and one is kept for NaN */

/* Levels made ready for one type of reading: rounded up to that type, so that x >= level decides as in exact
 * arithmetic, and laid out for the kernels. A value: copied freely, nothing to release. */
typedef struct {
    const struct lm_kernels *kernels;
    lm_reading reading;
    uint32_t count;                      /* levels that a reading of this type can reach */
    uint32_t depth;                      /* of the search: 2^depth > count */
    bool plain;                          /* codes[k] == k: no labels to apply */
    uint8_t invalid;                     /* code of NaN */
    uint8_t code[256];                   /* of interval k; past count the last repeats, up to 2^depth */
    uint8_t found[256];                  /* the same, by the bits of the search path, first comparison lowest */
    uint8_t table[256];                  /* 8-bit readings: code of each byte */
    _Alignas(64) uint8_t level[256 * 8]; /* of the reading's type, ascending, padded to 2^depth - 1 with its largest */
    _Alignas(64) uint8_t node[40 * 64];  /* the levels by step of the search, as the kernels compare them */
} lm_slicer;

/* levels: ascending (equal ones leave an empty interval), no NaN, at most LM_MAX_LEVELS; codes: count + 1. On failure
 * out holds nothing. */
LM_API LM_MUST_USE lm_status lm_slicer_init(lm_slicer *out, lm_reading reading, const double levels[], size_t count,
                                            const uint8_t codes[], uint8_t invalid, lm_fault *fault);

/* out[i] = code of x[i], for n readings that lie stride bytes apart, aligned or not, with their bytes swapped or not;
 * out_stride is in bytes too. x and out do not overlap. NaN compares may raise the processor's invalid flag. Cannot
 * fail. */
LM_API void lm_slicer_decide(const lm_slicer *slicer, const void *x, ptrdiff_t stride, bool swapped, size_t n,
                             uint8_t *out, ptrdiff_t out_stride);

/* One bit a reading: bit 0 of its code, the first reading in the lowest bit of a byte, or in the highest when big; the
 * last byte is filled up with zeros. out has (n + 7) / 8 bytes. Returns how many codes have bit 7 set: a slicer whose
 * invalid code is 0x80 or 0x81 counts NaN so. Cannot fail. */
LM_API size_t lm_slicer_pack(const lm_slicer *slicer, const void *x, ptrdiff_t stride, bool swapped, size_t n, bool big,
                             uint8_t *out);

/* Adds to counts[code * states + state] for n < 2^32 readings and their true states (of an integer type, in native
 * byte order; NULL: all in state 0). The slicer's codes are below decisions and its invalid code is decisions, the last
 * row of counts: (decisions + 1) * states. store, unless NULL, takes the codes, 255 for NaN. LM_DOMAIN when a truth is
 * not below states (at most 255), LM_NO_MEMORY; counts is untouched then. */
LM_API LM_MUST_USE lm_status lm_slicer_tally(const lm_slicer *slicer, const void *x, ptrdiff_t stride, bool swapped,
                                             size_t n, const void *truth, ptrdiff_t truth_stride,
                                             lm_reading truth_reading, uint32_t decisions, uint32_t states,
                                             uint8_t *store, ptrdiff_t store_stride, uint64_t counts[],
                                             lm_fault *fault);

/* Levels with bands of these widths around them: an interval is left upwards when x >= level + width / 2 and downwards
 * when x < level - width / 2. *interval carries the state from call to call; LM_NO_INTERVAL: the first reading that is
 * a number starts, by the bare levels. NaN gets the invalid code and changes nothing. */
#define LM_NO_INTERVAL 255
typedef struct {
    lm_slicer bare, up, down;
    uint8_t code[LM_MAX_LEVELS + 1];
    uint8_t invalid;
} lm_hysteresis;

LM_API LM_MUST_USE lm_status lm_hysteresis_init(lm_hysteresis *out, lm_reading reading, const double levels[],
                                                const double widths[], size_t count, const uint8_t codes[],
                                                uint8_t invalid, lm_fault *fault);
LM_API void lm_hysteresis_decide(const lm_hysteresis *hysteresis, const void *x, ptrdiff_t stride, bool swapped,
                                 size_t n, uint8_t *interval, uint8_t *out, ptrdiff_t out_stride);

/* Interleaved channels, each with its own levels: levels[channel][count] ascending, codes[count + 1] shared by all or
 * codes[channel][count + 1]. The caller frees them; NULL is allowed there. On failure *out is NULL. */
typedef struct lm_channels lm_channels;
LM_API LM_MUST_USE lm_status lm_channels_new(lm_channels **out, lm_reading reading, const double levels[],
                                             size_t channels, size_t count, const uint8_t codes[], bool shared,
                                             uint8_t invalid, lm_fault *fault);
LM_API void lm_channels_free(lm_channels *channels);

/* Codes of n contiguous, aligned readings, the first of channel 0; x and out do not overlap. Parts of an array are best
 * cut at multiples of the width, which is a multiple of the number of channels. Neither can fail. */
LM_API size_t lm_channels_width(const lm_channels *channels);
LM_API void lm_channels_decide(const lm_channels *channels, const void *x, size_t n, uint8_t *out);

/* A function of the reading (an LLR, a posterior) by a compiled table: segments of the line with a polynomial each, and
 * the exact function outside them. Who makes the plan answers for its error; the kernels give the same bits on every
 * instruction set. */
#define LM_SOFT_DEGREE 7
#define LM_SOFT_MOST 250 /* segments */
typedef lm_status lm_soft_exact(const void *context, const double x[], double out[], size_t n);
typedef struct {
    size_t count;       /* of segments; may be 0 */
    const double *edge; /* count + 1, ascending; a segment holds its left edge */
    const double (*coefficient)[LM_SOFT_DEGREE + 3]; /* powers from 0, then centre and stretch: t = (x - c) * stretch */
    const float (*single_coefficient)[LM_SOFT_DEGREE + 3];
    const bool *hole;   /* of each segment: left to the exact function */
    bool single;        /* single precision keeps the error bound for readings that it holds */
    size_t direct_count;  /* readings on a lattice instead: the values at origin + k * step, */
    const double *direct; /* exact elsewhere */
    double origin, step;
    lm_soft_exact *exact; /* called from any thread */
    const void *context;  /* borrowed */
} lm_soft_plan;
typedef struct lm_soft lm_soft;
typedef enum { LM_SOFT_F32, LM_SOFT_F64, LM_SOFT_I8 } lm_soft_output;

/* The plan is copied. NULL may be freed. */
LM_API LM_MUST_USE lm_status lm_soft_new(const lm_soft_plan *plan, lm_soft **out);
LM_API void lm_soft_free(lm_soft *soft);
LM_API size_t lm_soft_segments(const lm_soft *soft);
LM_API lm_range lm_soft_span(const lm_soft *soft); /* of the table; NaN when it is empty */

/* Values of n readings; out is float, double, or int8 in steps (-127 to 127, -128 for NaN). NaN gives NaN. Fails as
 * the exact function does. */
LM_API LM_MUST_USE lm_status lm_soft_values(const lm_soft *soft, lm_reading reading, const void *x, ptrdiff_t stride,
                                            bool swapped, size_t n, lm_soft_output output, double step, void *out,
                                            ptrdiff_t out_stride);

/* A segment's polynomial as the kernels evaluate it. */
LM_API double lm_soft_polynomial(const double coefficient[LM_SOFT_DEGREE + 3], double x);
LM_API float lm_soft_polynomial_single(const float coefficient[LM_SOFT_DEGREE + 3], float x);

/* Bytes of one reading; cannot fail. */
LM_API size_t lm_reading_size(lm_reading reading);

/* Kernels are chosen once, the best that the processor runs unless a name forces one before any use. LM_UNKNOWN when
 * the name is none of lm_kernels_name(0..), which lists the usable ones, best first, and then NULL. */
LM_API LM_MUST_USE lm_status lm_kernels_choose(const char *name);
LM_API const char *lm_kernels_name(size_t index);
LM_API const char *lm_kernels_chosen(void);

/* Runs work(context, block) for every block below blocks, on this thread and threads - 1 others (fewer when the
 * system gives fewer). stop, which may be NULL, is asked on this thread between its blocks; LM_CALLBACK when it says
 * true. */
typedef void lm_work(void *context, size_t block);
typedef bool lm_stop(void *context);
LM_API LM_MUST_USE lm_status lm_run_blocks(size_t blocks, unsigned threads, lm_work *work, lm_stop *stop,
                                           void *context);

/* Processors this process may use: affinity and the quota of its control group; at least 1. Reads /proc. */
LM_API unsigned lm_threads_available(void);

/* The log likelihood ratio log f_a(x) - log f_b(x), which keeps its accuracy where the two nearly cancel; NaN where
 * neither state can give the reading. The densities are retained; the caller frees, NULL is allowed there. */
typedef struct lm_log_ratio lm_log_ratio;
LM_API LM_MUST_USE lm_status lm_log_ratio_new(const lm_density *a, const lm_density *b, lm_log_ratio **out,
                                              lm_fault *fault);
LM_API void lm_log_ratio_free(lm_log_ratio *ratio);
LM_API LM_MUST_USE lm_status lm_log_ratio_values(const void *ratio, const double x[], double out[], size_t n);

/* The same object for the posterior of one state: its values are P(state | x), which priors weigh. */
LM_API LM_MUST_USE lm_status lm_posterior_new(const lm_density *const densities[], const double priors[],
                                              size_t states, size_t state, lm_log_ratio **out, lm_fault *fault);

/* A compiled table of either, within 1e-6 of max(1, |value|) for readings and results of single precision and better;
 * it borrows the ratio. */
LM_API LM_MUST_USE lm_status lm_log_ratio_compile(const lm_log_ratio *ratio, lm_soft **out);

/* ---- evidence: what recordings say ------------------------------------------------------------------------------
 *
 * The density of readings that stand for one state: a log-spline body whose knots are chosen by the Bayes information
 * criterion, and generalized Pareto tails. Readings on a lattice (clock ticks, converter codes) count as spread evenly
 * over their cells, half a step to either side. Refuses fewer than 20 readings, fewer than 3 distinct ones, and any
 * that is not finite or beyond 1e307. *out is set only on success and is the caller's to release.
 */
LM_API LM_MUST_USE lm_status lm_density_from_readings(const double readings[], size_t n, lm_density **out,
                                                      lm_fault *fault);

/* A generalized Pareto tail, shape >= 0. */
typedef struct {
    double readings; /* beyond the threshold */
    double scale, shape;
    double scale_error, shape_error; /* standard errors */
    double log_likelihood;
} lm_pareto_tail;

/* The likeliest tail of the readings above a threshold, of which there must be 2 at least. */
LM_API LM_MUST_USE lm_status lm_pareto_fit(const double readings[], size_t n, double threshold, lm_pareto_tail *out,
                                           lm_fault *fault);

/* Exact two-sided bounds of a rate from errors in independent trials (Clopper and Pearson): whole numbers from 0 to
 * trials, and trials from 1 to 2^53; each side leaves out half of 1 - confidence. *out is set only on success. */
LM_API LM_MUST_USE lm_status lm_error_bounds(double errors, double trials, double confidence, lm_range *out,
                                             lm_fault *fault);

#endif
