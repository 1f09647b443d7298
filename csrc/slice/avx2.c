/* The counting kernels for AVX2: 32 bytes. */
#include "kernels.h"

#if defined(__x86_64__)
#include <string.h>

static bool usable(void)
{
    return __builtin_cpu_supports("avx2");
}

#define LM_VECTOR 32
#define LM_TARGET __attribute__((target("avx2")))
#define LM_SET lm_kernels_avx2
#define LM_SET_NAME "avx2"
#include "count_body.h"
#endif
