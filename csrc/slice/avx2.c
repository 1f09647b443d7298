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

/* Packs work within halves of a register, so the last step puts pieces of four bytes in order. */
LM_TARGET static inline __attribute__((always_inline)) void narrow(const __m256i *sum, size_t size, uint8_t out[])
{
    __m256i packed = sum[0], wide[4];
    if (size == 2)
        packed = _mm256_permute4x64_epi64(_mm256_packus_epi16(sum[0], sum[1]), _MM_SHUFFLE(3, 1, 2, 0));
    if (size >= 4) {
        for (size_t r = 0; r < 4; r++)
            wide[r] = size == 4 ? sum[r]
                                : _mm256_permute4x64_epi64(
                                      _mm256_castps_si256(_mm256_shuffle_ps(_mm256_castsi256_ps(sum[size / 4 * r]),
                                                                            _mm256_castsi256_ps(sum[size / 4 * r + 1]),
                                                                            _MM_SHUFFLE(2, 0, 2, 0))),
                                      _MM_SHUFFLE(3, 1, 2, 0));
        packed = _mm256_packus_epi16(_mm256_packs_epi32(wide[0], wide[1]), _mm256_packs_epi32(wide[2], wide[3]));
        packed = _mm256_permutevar8x32_epi32(packed, _mm256_setr_epi32(0, 4, 1, 5, 2, 6, 3, 7));
    }
    _mm256_storeu_si256((__m256i_u *)out, packed);
}
#define NARROW(name, type, sum, out) narrow((const __m256i *)(sum), sizeof(type), out)

/* Where a search (or a look-up of bytes) overtakes counting, as measured on Zen 4. */
#define LM_COUNTED(type) (sizeof(type) == 1 ? 48 : sizeof(type) == 2 ? 192 : sizeof(type) == 4 ? 80 : 48)

#define LM_SET lm_kernels_avx2
#define LM_SET_NAME "avx2"
#define LM_PACK pack
#include "count_body.h"
#endif
