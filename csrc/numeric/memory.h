/* The one seam through which the library asks for memory, so that a test can count allocations and fail the nth. */
#ifndef LM_MEMORY_H
#define LM_MEMORY_H

#include <stddef.h>

#include "compiler.h"

/* count items of size bytes, uninitialised; NULL when it cannot be had or count * size overflows; never NULL else,
 * also for no items at all. */
LM_MUST_USE void *lm_allocate(size_t count, size_t size);

/* The same, zeroed. */
LM_MUST_USE void *lm_allocate_zeroed(size_t count, size_t size);

/* Resizes; on failure returns NULL and the old block stays. */
LM_MUST_USE void *lm_reallocate(void *block, size_t count, size_t size);

/* NULL is allowed. */
void lm_release(void *block);

#ifdef LM_TEST_MEMORY
/* Test build only: fail the nth allocation from now (1 is the next, 0 none), and the number of blocks in use. */
void lm_memory_fail_at(size_t nth);
size_t lm_memory_live(void);
#endif

#endif
