/* The searching kernels for AVX-512 with byte permutes and population counts (Ice Lake, Zen 4 and newer): every step of
 * the search looks its level up in registers by the path so far, so cost grows with the logarithm of the number of
 * levels.
 *
 * 64 readings make 64 codes. The path of a reading is one bit a step, lowest first; a permute ignores index bits above
 * its table, so the path itself is the index of every step. Codes, labels included, are a last permute of the path.
 */
#include "kernels.h"

#if defined(__x86_64__)
#include <immintrin.h>
#include <string.h>

/* UBSan would check each of thousands of inlined intrinsics, and compile for minutes; ASan watches all the same. */
#define TARGET                                                                                                         \
    __attribute__((target("avx512f,avx512bw,avx512dq,avx512vl,avx512vbmi,avx512vpopcntdq,popcnt"),                     \
                   no_sanitize("undefined")))
#define INLINE static inline __attribute__((always_inline)) TARGET

static bool usable(void)
{
    return __builtin_cpu_supports("avx512f") && __builtin_cpu_supports("avx512bw") &&
           __builtin_cpu_supports("avx512dq") && __builtin_cpu_supports("avx512vl") &&
           __builtin_cpu_supports("avx512vbmi") && __builtin_cpu_supports("avx512vpopcntdq");
}

/* ---- codes of 64 paths ---- */

typedef struct {
    __m512i part[4];
} map;

INLINE map map_of(const uint8_t from[256])
{
    return (map){{_mm512_loadu_si512(from), _mm512_loadu_si512(from + 64), _mm512_loadu_si512(from + 128),
                  _mm512_loadu_si512(from + 192)}};
}

INLINE __m512i mapped(const map *m, __m512i path, int depth)
{
    if (depth <= 6)
        return _mm512_permutexvar_epi8(path, m->part[0]);
    __m512i low = _mm512_permutex2var_epi8(m->part[0], path, m->part[1]);
    __m512i high = _mm512_permutex2var_epi8(m->part[2], path, m->part[3]);
    return _mm512_mask_blend_epi8(_mm512_movepi8_mask(path), low, high);
}

/* ---- lanes of 16, 32 and 64 bits: what differs ---- */

/* 64 paths in 2, 4 or 8 vectors to 64 bytes in order; paths are below 256, so the saturation of the packs never acts.
 */
INLINE __m512i pack_16(const __m512i p[2])
{
    const __m512i order = _mm512_setr_epi64(0, 2, 4, 6, 1, 3, 5, 7);
    return _mm512_permutexvar_epi64(order, _mm512_packus_epi16(p[0], p[1]));
}

INLINE __m512i pack_32(const __m512i p[4])
{
    const __m512i order = _mm512_setr_epi32(0, 4, 8, 12, 1, 5, 9, 13, 2, 6, 10, 14, 3, 7, 11, 15);
    __m512i packed = _mm512_packus_epi16(_mm512_packus_epi32(p[0], p[1]), _mm512_packus_epi32(p[2], p[3]));
    return _mm512_permutexvar_epi32(order, packed);
}

INLINE __m512i pack_64(const __m512i p[8])
{
    const __m512i even = _mm512_setr_epi32(0, 2, 4, 6, 8, 10, 12, 14, 16, 18, 20, 22, 24, 26, 28, 30);
    __m512i half[4];
    for (int r = 0; r < 4; r++)
        half[r] = _mm512_permutex2var_epi32(p[2 * r], even, p[2 * r + 1]);
    return pack_32(half);
}

typedef short type_16;
typedef int type_32;
typedef long long type_64;

#define LOOKUP(bits)                                                                                                   \
    /* the entry of a table of `vectors` registers that the low bits of each path name */                              \
    INLINE __m512i lookup_##bits(const uint8_t *node, int vectors, __m512i path)                                       \
    {                                                                                                                  \
        __m512i entry[8];                                                                                              \
        if (vectors == 1)                                                                                              \
            return _mm512_permutexvar_epi##bits(path, _mm512_load_si512(node));                                        \
        for (int v = 0; v < vectors / 2; v++)                                                                          \
            entry[v] = _mm512_permutex2var_epi##bits(_mm512_load_si512(node + 128 * v), path,                          \
                                                     _mm512_load_si512(node + 128 * v + 64));                          \
        int bit = 2 * (512 / bits);                                                                                    \
        for (int left = vectors / 2; left > 1; left /= 2, bit *= 2)                                                    \
            for (int v = 0; v < left / 2; v++)                                                                         \
                entry[v] = _mm512_mask_blend_epi##bits(                                                                \
                    _mm512_test_epi##bits##_mask(path, _mm512_set1_epi##bits((type_##bits)bit)), entry[2 * v],         \
                    entry[2 * v + 1]);                                                                                 \
        return entry[0];                                                                                               \
    }
LOOKUP(16)
LOOKUP(32)
LOOKUP(64)

/* Bit 0 of 64 codes. */
INLINE uint64_t bits_of(__m512i codes, bool big)
{
    const __m512i backwards =
        _mm512_broadcast_i32x4(_mm_setr_epi8(7, 6, 5, 4, 3, 2, 1, 0, 15, 14, 13, 12, 11, 10, 9, 8));
    return _mm512_test_epi8_mask(big ? _mm512_shuffle_epi8(codes, backwards) : codes, _mm512_set1_epi8(1));
}

/* ---- kernels ---- */

#define GE_I(bits, x, level) _mm512_cmpge_epi##bits##_mask(x, level)
#define GE_F(bits, x, level) _mm512_cmp_ps_mask(_mm512_castsi512_ps(x), _mm512_castsi512_ps(level), _CMP_GE_OQ)
#define GE_D(bits, x, level) _mm512_cmp_pd_mask(_mm512_castsi512_pd(x), _mm512_castsi512_pd(level), _CMP_GE_OQ)
#define AS_IS(x, turn) ((void)(turn), (x))
#define TURN(x, turn) _mm512_xor_si512(x, turn)
#define F16_LIFT(x, turn)                                                                                              \
    ((void)(turn), _mm512_xor_si512(x, _mm512_and_si512(_mm512_srai_epi16(x, 15), _mm512_set1_epi16(0x7fff))))
/* A mask as bits in a general register, whatever the compiler thinks: GCC 12 widens a mask by spilling 32 bits of its
 * register and reloading 64, half of them garbage. */
#define IN_GENERAL(bits, move)                                                                                         \
    INLINE uint32_t general_##bits(__mmask##bits mask)                                                                 \
    {                                                                                                                  \
        uint32_t general;                                                                                              \
        __asm__(move " %1, %0" : "=r"(general) : "k"(mask));                                                           \
        return general;                                                                                                \
    }
IN_GENERAL(8, "kmovb")
IN_GENERAL(16, "kmovw")
IN_GENERAL(32, "kmovd")

#define NAN_NEVER(x) 0
#define NAN_F16(x)                                                                                                     \
    general_32(                                                                                                        \
        _mm512_cmpgt_epi16_mask(_mm512_and_si512(x, _mm512_set1_epi16(0x7fff)), _mm512_set1_epi16(LM_F16_INFINITY)))
#define NAN_F(x) general_16(_mm512_cmp_ps_mask(_mm512_castsi512_ps(x), _mm512_castsi512_ps(x), _CMP_UNORD_Q))
#define NAN_D(x) general_8(_mm512_cmp_pd_mask(_mm512_castsi512_pd(x), _mm512_castsi512_pd(x), _CMP_UNORD_Q))

/* What turns unsigned readings into signed ones of the same order; their nodes are turned already. */
#define TURN_OF(bits)                                                                                                  \
    INLINE __m512i turn_##bits(lm_reading reading)                                                                     \
    {                                                                                                                  \
        return _mm512_set1_epi##bits(reading == LM_U##bits ? (type_##bits)(1ull << (bits - 1)) : 0);                   \
    }
TURN_OF(16)
TURN_OF(32)
TURN_OF(64)

/* name, type, bits of a lane, comparison, lift to what is compared, mask of NaN, can NaN occur */
#define KERNEL(name, type, bits, GE, LIFT, NAN_OF, may_be_nan)                                                         \
    INLINE __m512i search_##name(const uint8_t *node, __m512i key, int depth)                                          \
    {                                                                                                                  \
        __m512i path = _mm512_maskz_set1_epi##bits(GE(bits, key, _mm512_load_si512(node)), 1);                         \
        _Pragma("GCC unroll 8") for (int step = 1; step < depth; step++)                                               \
        {                                                                                                              \
            int vectors = (bits / 8 << step) <= 64 ? 1 : (bits / 8 << step) / 64;                                      \
            __m512i level = lookup_##bits(node + lm_node_offset((uint32_t)step, bits / 8), vectors, path);             \
            path = _mm512_mask_add_epi##bits(path, GE(bits, key, level), path,                                         \
                                             _mm512_set1_epi##bits((type_##bits)1 << step));                           \
        }                                                                                                              \
        return path;                                                                                                   \
    }                                                                                                                  \
                                                                                                                       \
    /* Long searches are calls: copies of them would only make the object large. */                                    \
    TARGET static __attribute__((noinline)) __m512i search6_##name(const uint8_t *node, __m512i key)                   \
    {                                                                                                                  \
        return search_##name(node, key, 6);                                                                            \
    }                                                                                                                  \
                                                                                                                       \
    TARGET static __attribute__((noinline)) __m512i search8_##name(const uint8_t *node, __m512i key)                   \
    {                                                                                                                  \
        return search_##name(node, key, 8);                                                                            \
    }                                                                                                                  \
                                                                                                                       \
    INLINE __m512i codes_##name(const lm_slicer *s, const map *m, __m512i turn, __m512i invalid,                       \
                                const __m512i x[bits / 8], int depth)                                                  \
    {                                                                                                                  \
        __m512i path[bits / 8];                                                                                        \
        uint64_t lost = 0;                                                                                             \
        for (int r = 0; r < bits / 8; r++) {                                                                           \
            const __m512i key = LIFT(x[r], turn);                                                                      \
            path[r] = depth <= 4   ? search_##name(s->node, key, depth)                                                \
                      : depth == 6 ? search6_##name(s->node, key)                                                      \
                                   : search8_##name(s->node, key);                                                     \
            lost |= (uint64_t)NAN_OF(x[r]) << (r * (512 / bits) & 63);                                                 \
        }                                                                                                              \
        __m512i codes = mapped(m, pack_##bits(path), depth);                                                           \
        return may_be_nan ? _mm512_mask_mov_epi8(codes, lost, invalid) : codes;                                        \
    }                                                                                                                  \
                                                                                                                       \
    /* 64 readings, or the last few of n: a masked load touches no others */                                           \
    INLINE void load_##name(const uint8_t *x, size_t i, size_t n, __m512i v[bits / 8])                                 \
    {                                                                                                                  \
        if (i + 64 <= n) {                                                                                             \
            for (size_t r = 0; r < bits / 8; r++)                                                                      \
                v[r] = _mm512_loadu_si512(x + i * (bits / 8) + 64 * r);                                                \
            return;                                                                                                    \
        }                                                                                                              \
        size_t left = (n - i) * (bits / 8);                                                                            \
        for (size_t r = 0; r < bits / 8; r++) {                                                                        \
            size_t here = left <= 64 * r ? 0 : left - 64 * r >= 64 ? 64 : left - 64 * r;                               \
            v[r] = _mm512_maskz_loadu_epi8(here == 64 ? ~0ull : (1ull << here) - 1,                                    \
                                           here == 0 ? x : x + i * (bits / 8) + 64 * r);                               \
        }                                                                                                              \
    }                                                                                                                  \
                                                                                                                       \
    INLINE void run_##name(const lm_slicer *s, const uint8_t *x, size_t n, uint8_t out[], int depth)                   \
    {                                                                                                                  \
        const map m = map_of(s->found);                                                                                \
        const __m512i invalid = _mm512_set1_epi8((char)s->invalid);                                                    \
        const __m512i turn = turn_##bits(s->reading);                                                                  \
        __m512i v[bits / 8];                                                                                           \
        size_t i = 0;                                                                                                  \
        for (; i + 64 <= n; i += 64) {                                                                                 \
            load_##name(x, i, i + 64, v);                                                                              \
            _mm512_storeu_si512(out + i, codes_##name(s, &m, turn, invalid, v, depth));                                \
        }                                                                                                              \
        if (i < n) {                                                                                                   \
            load_##name(x, i, n, v);                                                                                   \
            _mm512_mask_storeu_epi8(out + i, (1ull << (n - i)) - 1, codes_##name(s, &m, turn, invalid, v, depth));     \
        }                                                                                                              \
    }                                                                                                                  \
                                                                                                                       \
    INLINE size_t run_bits_##name(const lm_slicer *s, const uint8_t *x, size_t n, uint8_t out[], bool big, int depth)  \
    {                                                                                                                  \
        const map m = map_of(s->found);                                                                                \
        const __m512i invalid = _mm512_set1_epi8((char)s->invalid);                                                    \
        const __m512i turn = turn_##bits(s->reading);                                                                  \
        __m512i v[bits / 8];                                                                                           \
        size_t lost = 0;                                                                                               \
        for (size_t i = 0; i < n; i += 64) {                                                                           \
            load_##name(x, i, n, v);                                                                                   \
            __m512i codes = codes_##name(s, &m, turn, invalid, v, depth);                                              \
            if (i + 64 > n)                                                                                            \
                codes = _mm512_maskz_mov_epi8((1ull << (n - i)) - 1, codes);                                           \
            if (may_be_nan)                                                                                            \
                lost += (size_t)_mm_popcnt_u64(_mm512_movepi8_mask(codes));                                            \
            uint64_t packed = bits_of(codes, big);                                                                     \
            memcpy(out + i / 8, &packed, i + 64 <= n ? 8 : (n - i + 7) / 8);                                           \
        }                                                                                                              \
        return lost;                                                                                                   \
    }                                                                                                                  \
                                                                                                                       \
    TARGET static size_t bits_##name(const lm_slicer *s, const void *x, size_t n, uint8_t out[], bool big)             \
    {                                                                                                                  \
        return s->depth == 1 ? run_bits_##name(s, x, n, out, big, 1) : run_bits_##name(s, x, n, out, big, 2);          \
    }                                                                                                                  \
                                                                                                                       \
    TARGET static void decide_##name(const lm_slicer *s, const void *x, size_t n, uint8_t out[])                       \
    {                                                                                                                  \
        switch (s->depth) {                                                                                            \
        case 1:                                                                                                        \
            run_##name(s, x, n, out, 1);                                                                               \
            break;                                                                                                     \
        case 2:                                                                                                        \
            run_##name(s, x, n, out, 2);                                                                               \
            break;                                                                                                     \
        case 3:                                                                                                        \
            run_##name(s, x, n, out, 3);                                                                               \
            break;                                                                                                     \
        case 4:                                                                                                        \
            run_##name(s, x, n, out, 4);                                                                               \
            break;                                                                                                     \
        case 6:                                                                                                        \
            run_##name(s, x, n, out, 6);                                                                               \
            break;                                                                                                     \
        default:                                                                                                       \
            run_##name(s, x, n, out, 8);                                                                               \
        }                                                                                                              \
    }
KERNEL(i16, int16_t, 16, GE_I, TURN, NAN_NEVER, false)
KERNEL(i32, int32_t, 32, GE_I, TURN, NAN_NEVER, false)
KERNEL(i64, int64_t, 64, GE_I, TURN, NAN_NEVER, false)
KERNEL(f16, uint16_t, 16, GE_I, F16_LIFT, NAN_F16, true)
KERNEL(f32, float, 32, GE_F, AS_IS, NAN_F, true)
KERNEL(f64, double, 64, GE_D, AS_IS, NAN_D, true)

/* A byte has 256 values: its code is one look-up, whatever the levels. */
TARGET static void decide_bytes(const lm_slicer *s, const void *readings, size_t n, uint8_t out[])
{
    const uint8_t *x = readings;
    const map m = map_of(s->table);
    size_t i = 0;
    for (; i + 64 <= n; i += 64)
        _mm512_storeu_si512(out + i, mapped(&m, _mm512_loadu_si512(x + i), 8));
    __mmask64 rest = (1ull << (n - i)) - 1;
    _mm512_mask_storeu_epi8(out + i, rest, mapped(&m, _mm512_maskz_loadu_epi8(rest, x + i), 8));
}
#define decide_i8 decide_bytes
#define decide_u8 decide_bytes
#define decide_u16 decide_i16
#define bits_u16 bits_i16
#define decide_u32 decide_i32
#define bits_u32 bits_i32
#define decide_u64 decide_i64
#define bits_u64 bits_i64
#define bits_i8 NULL
#define bits_u8 NULL

TARGET static void pack(const uint8_t code[], size_t bytes, uint8_t out[], bool big)
{
    size_t i = 0;
    for (; i + 8 <= bytes; i += 8) {
        uint64_t packed = bits_of(_mm512_loadu_si512(code + 8 * i), big);
        memcpy(out + i, &packed, 8);
    }
    lm_pack_plain(code + 8 * i, bytes - i, out + i, big);
}

/* The bit planes of n bytes, a word for each 64, zeros up to a whole register of words; true when all
 * bytes are below limit. */
enum { PLANES = 6, WORDS = LM_COUNTED_READINGS / 64 };

INLINE bool so_many_planes(const uint8_t byte[], size_t n, uint32_t limit, int planes, uint64_t plane[][WORDS])
{
    __m512i most = _mm512_setzero_si512();
    size_t w = 0;
    for (; 64 * w + 64 <= n; w++) {
        const __m512i bytes = _mm512_loadu_si512(byte + 64 * w);
        most = _mm512_max_epu8(most, bytes);
        _Pragma("GCC unroll 8") for (int p = 0; p < planes; p++) plane[p][w] =
            _mm512_test_epi8_mask(bytes, _mm512_set1_epi8((char)(1 << p)));
    }
    for (; w % 8 != 0 || 64 * w < n; w++) { /* to a whole register of words */
        const __mmask64 there = n <= 64 * w ? 0 : (1ull << (n - 64 * w)) - 1;
        const __m512i bytes = _mm512_maskz_loadu_epi8(there, there != 0 ? byte + 64 * w : byte);
        most = _mm512_max_epu8(most, bytes);
        for (int p = 0; p < planes; p++)
            plane[p][w] = _mm512_test_epi8_mask(bytes, _mm512_set1_epi8((char)(1 << p)));
    }
    return _mm512_cmpge_epu8_mask(most, _mm512_set1_epi8((char)limit)) == 0;
}

TARGET static bool planes_of(const uint8_t byte[], size_t n, uint32_t limit, int planes, uint64_t plane[][WORDS])
{
    switch (planes) { /* so that each number has its own loop */
    case 0:
        return so_many_planes(byte, n, limit, 0, plane);
    case 1:
        return so_many_planes(byte, n, limit, 1, plane);
    case 2:
        return so_many_planes(byte, n, limit, 2, plane);
    case 3:
        return so_many_planes(byte, n, limit, 3, plane);
    default:
        return so_many_planes(byte, n, limit, PLANES, plane);
    }
}

/* Where the planes spell a value, among the readings that are there, a word for each 64; whether they do anywhere. */
INLINE bool spell(uint32_t value, int planes, uint64_t plane[][WORDS], const uint64_t there[WORDS], size_t words,
                  uint64_t where[WORDS])
{
    __m512i any = _mm512_setzero_si512();
    for (size_t w = 0; w < words; w += 8) {
        __m512i here = _mm512_load_si512(there + w);
        for (int p = 0; p < planes; p++) {
            const __m512i bits = _mm512_load_si512(plane[p] + w);
            here = value >> p & 1 ? _mm512_and_si512(bits, here) : _mm512_andnot_si512(bits, here);
        }
        _mm512_store_si512(where + w, here);
        any = _mm512_or_si512(any, here);
    }
    return _mm512_test_epi64_mask(any, any) != 0;
}

/* A cell of the tally is the population of two masks: readings of one decision, readings of one state. All planes are
 * written before any is read, since a wide load waits for narrow stores just before it. */
TARGET static bool count(const uint8_t code[], const uint8_t truth[], size_t n, uint32_t decisions, uint32_t states,
                         uint64_t cell[][8])
{
    _Alignas(64) uint64_t code_plane[PLANES][WORDS], truth_plane[PLANES][WORDS];
    _Alignas(64) uint64_t there[WORDS], decided[WORDS], true_in[LM_COUNTED_CELLS][WORDS];
    int code_planes = 0, truth_planes = 0;
    while (decisions > 1u << code_planes)
        code_planes++;
    while (states > 1u << truth_planes)
        truth_planes++;
    if (!planes_of(code, n, decisions, code_planes, code_plane) ||
        !planes_of(truth, n, states, truth_planes, truth_plane))
        return false;
    const size_t words = (n + 63) / 64;
    for (size_t w = 0; w < WORDS; w++)
        there[w] = n >= 64 * w + 64 ? ~0ull : n <= 64 * w ? 0 : (1ull << (n - 64 * w)) - 1;
    for (uint32_t s = 0; s < states; s++)
        spell(s, truth_planes, truth_plane, there, words, true_in[s]);
    for (uint32_t d = 0; d < decisions; d++) {
        if (!spell(d, code_planes, code_plane, there, words, decided))
            continue; /* NaN, mostly */
        for (uint32_t s = 0; s < states; s++) {
            __m512i sum = _mm512_load_si512(cell[d * states + s]);
            for (size_t w = 0; w < words; w += 8)
                sum = _mm512_add_epi64(sum, _mm512_popcnt_epi64(_mm512_and_si512(_mm512_load_si512(decided + w),
                                                                                 _mm512_load_si512(true_in[s] + w))));
            _mm512_store_si512(cell[d * states + s], sum);
        }
    }
    return true;
}

/* The compiler's vectors do for channels, whose cost is the tables. */
#define LM_VECTOR 64
#define LM_TARGET TARGET
#include "channel_body.h"

/* ---- soft values: coefficients looked up in registers by the segment ---- */

#define SOFT(name, type, bits, vec, mask, SUB, MUL, ADD, TO, FROM, WIDEN)                                              \
    INLINE void soft_run_##name(const type coefficient[][LM_SOFT_SEGMENTS], const type x[], const uint8_t segment[],   \
                                size_t n, type out[], int vectors)                                                     \
    {                                                                                                                  \
        for (size_t i = 0; i < n; i += 512 / bits) {                                                                   \
            const mask there = (mask)(n - i >= 512 / bits ? ~0u : (1u << (n - i)) - 1);                                \
            const __m512i s = WIDEN(_mm_maskz_loadu_epi8(there, segment + i));                                         \
            const vec at = _mm512_maskz_loadu_##TO(there, x + i);                                                      \
            vec row[LM_SOFT_ROWS];                                                                                     \
            _Pragma("GCC unroll 16") for (int k = 0; k < LM_SOFT_ROWS; k++) row[k] =                                   \
                FROM(lookup_##bits((const uint8_t *)coefficient[k], vectors, s));                                      \
            const vec t = MUL(SUB(at, row[LM_SOFT_CENTRE]), row[LM_SOFT_STRETCH]);                                     \
            vec sum = row[LM_SOFT_DEGREE];                                                                             \
            _Pragma("GCC unroll 16") for (int k = LM_SOFT_DEGREE - 1; k >= 0; k--) sum = ADD(MUL(sum, t), row[k]);     \
            _mm512_mask_storeu_##TO(out + i, there, sum);                                                              \
        }                                                                                                              \
    }
SOFT(f32, float, 32, __m512, __mmask16, _mm512_sub_ps, _mm512_mul_ps, _mm512_add_ps, ps, _mm512_castsi512_ps,
     _mm512_cvtepu8_epi32)
SOFT(f64, double, 64, __m512d, __mmask8, _mm512_sub_pd, _mm512_mul_pd, _mm512_add_pd, pd, _mm512_castsi512_pd,
     _mm512_cvtepu8_epi64)

TARGET static void soft_f32(const float coefficient[][LM_SOFT_SEGMENTS], size_t segments, const float x[],
                            const uint8_t segment[], size_t n, float out[])
{
    if (segments <= 16)
        soft_run_f32(coefficient, x, segment, n, out, 1);
    else if (segments <= 32)
        soft_run_f32(coefficient, x, segment, n, out, 2);
    else if (segments <= 64)
        soft_run_f32(coefficient, x, segment, n, out, 4);
    else if (segments <= 128)
        soft_run_f32(coefficient, x, segment, n, out, 8);
    else
        lm_soft_f32_plain(coefficient, segments, x, segment, n, out);
}

TARGET static void soft_f64(const double coefficient[][LM_SOFT_SEGMENTS], size_t segments, const double x[],
                            const uint8_t segment[], size_t n, double out[])
{
    if (segments <= 8)
        soft_run_f64(coefficient, x, segment, n, out, 1);
    else if (segments <= 16)
        soft_run_f64(coefficient, x, segment, n, out, 2);
    else if (segments <= 32)
        soft_run_f64(coefficient, x, segment, n, out, 4);
    else if (segments <= 64)
        soft_run_f64(coefficient, x, segment, n, out, 8);
    else
        lm_soft_f64_plain(coefficient, segments, x, segment, n, out);
}

#define LM_CHANNELS(code, name, type) [LM_##code] = channels_##name,
#define LM_SLOT(code, name, type) [LM_##code] = decide_##name,
#define LM_BITS(code, name, type) [LM_##code] = bits_##name,
const lm_kernels lm_kernels_avx512 = {
    .name = "avx512",
    .usable = usable,
    .searches = true,
    .decide = {LM_READINGS(LM_SLOT)},
    .bits = {LM_READINGS(LM_BITS)},
    .channels = {LM_READINGS(LM_CHANNELS)},
    .soft_f32 = soft_f32,
    .soft_f64 = soft_f64,
    .pack = pack,
    .count = count,
};
#endif
