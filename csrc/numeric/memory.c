/* Allocation through one seam; the test build counts blocks and fails the nth allocation. */
#include "memory.h"

#include <stdint.h>
#include <stdlib.h>

#ifdef LM_TEST_MEMORY
/* The only mutable globals of the library, and they exist in the test build alone. */
static size_t fail_at;
static size_t live;

void lm_memory_fail_at(size_t nth)
{
    fail_at = nth;
}

size_t lm_memory_live(void)
{
    return live;
}

static int must_fail(void)
{
    return fail_at > 0 && --fail_at == 0;
}

static void *counted(void *block, size_t change)
{
    if (block != NULL)
        live += change;
    return block;
}
#else
static int must_fail(void)
{
    return 0;
}

static void *counted(void *block, size_t change)
{
    (void)change;
    return block;
}
#endif

/* Bytes of count items, at least 1; 0 when the product overflows. */
static size_t bytes(size_t count, size_t size)
{
    if (size != 0 && count > SIZE_MAX / 2 / size)
        return 0;
    return count * size > 0 ? count * size : 1;
}

void *lm_allocate(size_t count, size_t size)
{
    size_t wanted = bytes(count, size);
    if (wanted == 0 || must_fail())
        return NULL;
    return counted(malloc(wanted), 1);
}

void *lm_allocate_zeroed(size_t count, size_t size)
{
    size_t wanted = bytes(count, size);
    if (wanted == 0 || must_fail())
        return NULL;
    return counted(calloc(1, wanted), 1);
}

void *lm_reallocate(void *block, size_t count, size_t size)
{
    size_t wanted = bytes(count, size);
    if (wanted == 0 || must_fail())
        return NULL;
    return counted(realloc(block, wanted), block == NULL ? 1 : 0);
}

void lm_release(void *block)
{
#ifdef LM_TEST_MEMORY
    if (block != NULL)
        live--;
#endif
    free(block);
}
