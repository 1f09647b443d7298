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

#endif
