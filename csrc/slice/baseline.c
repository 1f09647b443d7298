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
#if defined(__SSE2__)
#include <emmintrin.h>

static inline __attribute__((always_inline)) void narrow(const __m128i *sum, size_t size, uint8_t out[])
{
    __m128i packed = sum[0], wide[4];
    if (size == 2)
        packed = _mm_packus_epi16(sum[0], sum[1]);
    if (size >= 4) {
        for (size_t r = 0; r < 4; r++)
            wide[r] = size == 4 ? sum[r]
                                : _mm_castps_si128(_mm_shuffle_ps(_mm_castsi128_ps(sum[size / 4 * r]),
                                                                  _mm_castsi128_ps(sum[size / 4 * r + 1]),
                                                                  _MM_SHUFFLE(2, 0, 2, 0)));
        packed = _mm_packus_epi16(_mm_packs_epi32(wide[0], wide[1]), _mm_packs_epi32(wide[2], wide[3]));
    }
    _mm_storeu_si128((__m128i_u *)out, packed);
}
#define NARROW(name, type, sum, out) narrow((const __m128i *)(sum), sizeof(type), out)
#endif

/* Where a search (or a look-up of bytes) overtakes counting, as measured with SSE2 on Zen 4; it has no comparison of
 * 64-bit integers. */
#define LM_COUNTED(type)                                                                                               \
    (sizeof(type) == 1 ? 8 : sizeof(type) == 2 ? 40 : sizeof(type) == 4 ? 48 : (type)0.5 > 0 ? 16 : 4)

#define LM_SET lm_kernels_baseline
#define LM_SET_NAME "baseline"
#define LM_PACK lm_pack_plain
#include "count_body.h"
#endif
