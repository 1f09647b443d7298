/* The body of the counting kernels: which levels does each reading not reach, some vectors at a time.
 *
 * Included once for each instruction set, with LM_VECTOR (bytes of a register), LM_TARGET (function attribute) and
 * LM_SET (name of the struct of kernels) and LM_COUNTED (levels up to which a type is counted) defined. Few levels are
 * compared one after the other, and each takes away the step between the two codes it parts, so labels cost one
 * instruction more and no second pass. Many levels are searched, several readings side by side.
 */
#include "lanes.h"

enum { ABREAST = 8 /* readings searched side by side */ };

/* name; type of reading; lane: signed integer as wide; key: what is compared; kept: type of the slicer's levels; LIFT
 * and LIFT_ONE: reading to key; LEVEL: kept level to key; IS_NAN: vector to mask */
#define KERNEL(name, type, lane, key, kept, LIFT, LIFT_ONE, LEVEL, IS_NAN, IS_NAN_ONE)                                 \
    /* LM_VECTOR readings; plain: every step is 1 */                                                                   \
    INLINE void block_##name(const type *x, const key level[], const lane step[], size_t count, lane last,             \
                             lane invalid, bool plain, uint8_t out[])                                                  \
    {                                                                                                                  \
        /* four registers of readings and four of sums at a time: more would not stay in registers */                  \
        enum { FEW = sizeof(type) < 4 ? sizeof(type) : 4 };                                                            \
        sums_##name sum[sizeof(type)];                                                                                 \
        _Pragma("GCC unroll 2") for (size_t g = 0; g < sizeof(type); g += FEW)                                         \
        {                                                                                                              \
            keys_##name v[FEW];                                                                                        \
            _Pragma("GCC unroll 4") for (size_t r = 0; r < FEW; r++)                                                   \
            {                                                                                                          \
                v[r] = LIFT(name, *(const vec_##name *)(x + (g + r) * LANES(type)));                                   \
                sum[g + r] = (sums_##name){0} + (u##lane)last;                                                         \
            }                                                                                                          \
            for (size_t j = 0; j < count; j++)                                                                         \
                _Pragma("GCC unroll 4") for (size_t r = 0; r < FEW; r++)                                               \
                {                                                                                                      \
                    lanes_##name below = v[r] < level[j];                                                              \
                    sum[g + r] += (sums_##name)(plain ? below : below & step[j]);                                      \
                }                                                                                                      \
            _Pragma("GCC unroll 4") for (size_t r = 0; r < FEW; r++)                                                   \
            {                                                                                                          \
                lanes_##name lost = IS_NAN(name, *(const vec_##name *)(x + (g + r) * LANES(type)));                    \
                sum[g + r] = (sum[g + r] & (sums_##name) ~lost) | (sums_##name)(lost & invalid);                       \
            }                                                                                                          \
        }                                                                                                              \
        NARROW(name, type, sum, out);                                                                                  \
    }                                                                                                                  \
                                                                                                                       \
    INLINE void count_##name(const lm_slicer *s, const type *x, size_t n, uint8_t out[], bool plain)                   \
    {                                                                                                                  \
        key level[LM_MAX_LEVELS];                                                                                      \
        lane step[LM_MAX_LEVELS];                                                                                      \
        const kept *stored = (const void *)s->level;                                                                   \
        for (size_t j = 0; j < s->count; j++) {                                                                        \
            level[j] = LEVEL(name, stored[j]);                                                                         \
            step[j] = (lane)(s->code[j] - s->code[j + 1]);                                                             \
        }                                                                                                              \
        lane last = (lane)s->code[s->count];                                                                           \
        lane invalid = (lane)s->invalid;                                                                               \
        size_t i = 0;                                                                                                  \
        for (; i + LM_VECTOR <= n; i += LM_VECTOR)                                                                     \
            block_##name(x + i, level, step, s->count, last, invalid, plain, out + i);                                 \
        if (i < n) {                                                                                                   \
            type rest[LM_VECTOR] = {0};                                                                                \
            uint8_t codes[LM_VECTOR];                                                                                  \
            memcpy(rest, x + i, (n - i) * sizeof(type));                                                               \
            block_##name(rest, level, step, s->count, last, invalid, plain, codes);                                    \
            memcpy(out + i, codes, n - i);                                                                             \
        }                                                                                                              \
    }                                                                                                                  \
                                                                                                                       \
    INLINE void search_##name(const lm_slicer *s, const type *x, size_t n, uint8_t out[])                              \
    {                                                                                                                  \
        const kept *level = (const void *)s->level;                                                                    \
        size_t i = 0;                                                                                                  \
        for (; i + ABREAST <= n; i += ABREAST) {                                                                       \
            size_t k[ABREAST] = {0};                                                                                   \
            for (size_t half = (size_t)1 << (s->depth - 1); half > 0; half >>= 1)                                      \
                _Pragma("GCC unroll 8") for (size_t r = 0; r < ABREAST; r++) k[r] +=                                   \
                    LIFT_ONE(name, x[i + r]) >= LEVEL(name, level[k[r] + half - 1]) ? half : 0;                        \
            for (size_t r = 0; r < ABREAST; r++)                                                                       \
                out[i + r] = IS_NAN_ONE(x[i + r]) ? s->invalid : s->code[k[r]];                                        \
        }                                                                                                              \
        for (; i < n; i++) {                                                                                           \
            size_t k = 0;                                                                                              \
            for (size_t half = (size_t)1 << (s->depth - 1); half > 0; half >>= 1)                                      \
                k += LIFT_ONE(name, x[i]) >= LEVEL(name, level[k + half - 1]) ? half : 0;                              \
            out[i] = IS_NAN_ONE(x[i]) ? s->invalid : s->code[k];                                                       \
        }                                                                                                              \
    }                                                                                                                  \
                                                                                                                       \
    LM_TARGET static void decide_##name(const lm_slicer *s, const void *x, size_t n, uint8_t out[])                    \
    {                                                                                                                  \
        if (s->count > LM_COUNTED(type) && sizeof(type) == 1)                                                          \
            for (size_t i = 0; i < n; i++)                                                                             \
                out[i] = s->table[((const uint8_t *)x)[i]];                                                            \
        else if (s->count > LM_COUNTED(type))                                                                          \
            search_##name(s, x, n, out);                                                                               \
        else if (s->plain)                                                                                             \
            count_##name(s, x, n, out, true);                                                                          \
        else                                                                                                           \
            count_##name(s, x, n, out, false);                                                                         \
    }

KERNEL(i8, int8_t, int8_t, int8_t, int8_t, AS_KEY, AS_IS_ONE, AS_IS_ONE, NEVER, NEVER_ONE)
KERNEL(u8, uint8_t, int8_t, int8_t, uint8_t, TURNED, TURNED_ONE, TURNED_ONE, NEVER, NEVER_ONE)
KERNEL(i16, int16_t, int16_t, int16_t, int16_t, AS_KEY, AS_IS_ONE, AS_IS_ONE, NEVER, NEVER_ONE)
KERNEL(u16, uint16_t, int16_t, int16_t, uint16_t, TURNED, TURNED_ONE, TURNED_ONE, NEVER, NEVER_ONE)
KERNEL(i32, int32_t, int32_t, int32_t, int32_t, AS_KEY, AS_IS_ONE, AS_IS_ONE, NEVER, NEVER_ONE)
KERNEL(u32, uint32_t, int32_t, int32_t, uint32_t, TURNED, TURNED_ONE, TURNED_ONE, NEVER, NEVER_ONE)
KERNEL(i64, int64_t, int64_t, int64_t, int64_t, AS_KEY, AS_IS_ONE, AS_IS_ONE, NEVER, NEVER_ONE)
KERNEL(u64, uint64_t, int64_t, int64_t, uint64_t, TURNED, TURNED_ONE, TURNED_ONE, NEVER, NEVER_ONE)
KERNEL(f16, uint16_t, int16_t, int16_t, int16_t, F16_KEY, F16_LIFT_ONE, AS_IS_ONE, F16_NAN, F16_NAN_ONE)
KERNEL(f32, float, int32_t, float, float, AS_KEY, AS_IS_ONE, AS_IS_ONE, UNEQUAL, UNEQUAL_ONE)
KERNEL(f64, double, int64_t, double, double, AS_KEY, AS_IS_ONE, AS_IS_ONE, UNEQUAL, UNEQUAL_ONE)

#include "channel_body.h"
#include "soft_body.h"

LM_TARGET static void soft_f32(const float coefficient[][LM_SOFT_SEGMENTS], size_t segments, const float x[],
                               const uint8_t segment[], size_t n, float out[])
{
    (void)segments;
    evaluate_f32(coefficient, x, segment, n, out);
}

LM_TARGET static void soft_f64(const double coefficient[][LM_SOFT_SEGMENTS], size_t segments, const double x[],
                               const uint8_t segment[], size_t n, double out[])
{
    (void)segments;
    evaluate_f64(coefficient, x, segment, n, out);
}

#define LM_SLOT(code, name, type) [LM_##code] = decide_##name,
#define LM_CHANNELS(code, name, type) [LM_##code] = channels_##name,
const lm_kernels LM_SET = {.name = LM_SET_NAME,
                           .usable = usable,
                           .decide = {LM_READINGS(LM_SLOT)},
                           .channels = {LM_READINGS(LM_CHANNELS)},
                           .soft_f32 = soft_f32,
                           .soft_f64 = soft_f64,
                           .pack = LM_PACK};
