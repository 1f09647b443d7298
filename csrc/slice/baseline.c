/* The counting kernels for registers that every processor of the family has: 16 bytes, SSE2 or NEON. */
#include "kernels.h"

#if defined(__GNUC__)
#include <string.h>

static bool usable(void)
{
    return true;
}

#define LM_VECTOR 16
#define LM_TARGET
#define LM_SET lm_kernels_baseline
#define LM_SET_NAME "baseline"
#define LM_PACK lm_pack_plain
#include "count_body.h"
#endif
