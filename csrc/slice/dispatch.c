/* Which kernels run: one list, best first; chosen once, into a pointer that never changes again. */
#include "kernels.h"

#include <stdatomic.h>
#include <string.h>

static const lm_kernels *const sets[] = {
#if defined(__x86_64__)
    &lm_kernels_avx512,
    &lm_kernels_avx2,
#endif
#if defined(__GNUC__)
    &lm_kernels_baseline,
#endif
    &lm_kernels_portable,
};

static _Atomic(const lm_kernels *) chosen;

static const lm_kernels *settle(const lm_kernels *set)
{
    const lm_kernels *nobody = NULL;
    return atomic_compare_exchange_strong(&chosen, &nobody, set) ? set : nobody;
}

const lm_kernels *lm_kernels_get(void)
{
    const lm_kernels *set = atomic_load_explicit(&chosen, memory_order_acquire);
    for (size_t i = 0; set == NULL; i++)
        if (sets[i]->usable())
            set = settle(sets[i]);
    return set;
}

lm_status lm_kernels_choose(const char *name)
{
    for (size_t i = 0; i < LM_LENGTH(sets); i++)
        if (strcmp(sets[i]->name, name) == 0 && sets[i]->usable())
            return settle(sets[i]) == sets[i] ? LM_OK : LM_UNKNOWN;
    return LM_UNKNOWN;
}

const char *lm_kernels_name(size_t index)
{
    for (size_t i = 0; i < LM_LENGTH(sets); i++)
        if (sets[i]->usable() && index-- == 0)
            return sets[i]->name;
    return NULL;
}

const char *lm_kernels_chosen(void)
{
    return lm_kernels_get()->name;
}
