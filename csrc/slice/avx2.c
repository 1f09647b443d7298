/* The counting kernels for AVX2: 32 bytes. */
#include "kernels.h"

#if defined(__x86_64__)
#include <immintrin.h>
#include <string.h>

static bool usable(void)
{
    return __builtin_cpu_supports("avx2");
}

#define LM_VECTOR 32
#define LM_TARGET __attribute__((target("avx2")))

LM_TARGET static void pack(const uint8_t code[], size_t bytes, uint8_t out[], bool big)
{
    const __m256i backwards = _mm256_setr_epi8(7, 6, 5, 4, 3, 2, 1, 0, 15, 14, 13, 12, 11, 10, 9, 8, 7, 6, 5, 4, 3, 2,
                                               1, 0, 15, 14, 13, 12, 11, 10, 9, 8);
    size_t i = 0;
    for (; i + 4 <= bytes; i += 4) {
        __m256i codes = _mm256_loadu_si256((const __m256i_u *)(code + 8 * i));
        if (big)
            codes = _mm256_shuffle_epi8(codes, backwards);
        int bits = _mm256_movemask_epi8(_mm256_slli_epi16(codes, 7));
        memcpy(out + i, &bits, 4);
    }
    lm_pack_plain(code + 8 * i, bytes - i, out + i, big);
}

#define LM_SET lm_kernels_avx2
#define LM_SET_NAME "avx2"
#define LM_PACK pack
#include "count_body.h"
#endif
