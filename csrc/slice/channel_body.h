/* The body of the kernels for interleaved channels, each with its own levels: as in count_body.h, but levels and steps
 * come from tables as long as a run of channels instead of being the same for all lanes.
 */
#include "lanes.h"

#define CHANNELS(name, type, lane, LIFT, LEVEL, IS_NAN)                                                                \
    /* LM_VECTOR readings of the run from channel `at` */                                                              \
    INLINE void run_block_##name(const lm_channels *c, const type *x, size_t at, bool own, uint8_t out[])              \
    {                                                                                                                  \
        keys_##name v[sizeof(type)];                                                                                   \
        sums_##name sum[sizeof(type)];                                                                                 \
        const lane *last = c->last, *step = c->step;                                                                   \
        _Pragma("GCC unroll 8") for (size_t r = 0; r < sizeof(type); r++)                                              \
        {                                                                                                              \
            v[r] = LIFT(name, *(const vec_##name *)(x + r * LANES(type)));                                             \
            sum[r] = own ? (sums_##name)(*(const loaded_##name *)(last + at + r * LANES(type)))                        \
                         : (sums_##name){0} + (u##lane)c->code[c->count];                                              \
        }                                                                                                              \
        for (size_t j = 0; j < c->count; j++) {                                                                        \
            const type *level = (const type *)c->level + j * c->width + at;                                            \
            const lane fall = own ? 0 : (lane)(c->code[j] - c->code[j + 1]);                                           \
            _Pragma("GCC unroll 8") for (size_t r = 0; r < sizeof(type); r++)                                          \
            {                                                                                                          \
                lanes_##name below = v[r] < LEVEL(name, *(const vec_##name *)(level + r * LANES(type)));               \
                lanes_##name here = {0};                                                                               \
                here = own ? (lanes_##name)(*(const loaded_##name *)(step + j * c->width + at + r * LANES(type)))      \
                           : here + fall;                                                                              \
                sum[r] += (sums_##name)(below & here);                                                                 \
            }                                                                                                          \
        }                                                                                                              \
        _Pragma("GCC unroll 8") for (size_t r = 0; r < sizeof(type); r++)                                              \
        {                                                                                                              \
            lanes_##name lost = IS_NAN(name, *(const vec_##name *)(x + r * LANES(type)));                              \
            sum[r] = (sum[r] & (sums_##name) ~lost) | (sums_##name)(lost & (lane)c->invalid);                          \
        }                                                                                                              \
        NARROW(name, type, sum, out);                                                                                  \
    }                                                                                                                  \
                                                                                                                       \
    INLINE void runs_##name(const lm_channels *c, const type *x, size_t n, uint8_t out[], bool own)                    \
    {                                                                                                                  \
        for (size_t i = 0; i < n; i += c->width) {                                                                     \
            const size_t length = n - i < c->width ? n - i : c->width;                                                 \
            size_t at = 0;                                                                                             \
            for (; at + LM_VECTOR <= length; at += LM_VECTOR)                                                          \
                run_block_##name(c, x + i + at, at, own, out + i + at);                                                \
            if (at < length && length >= LM_VECTOR) /* some twice rather than some apart */                            \
                run_block_##name(c, x + i + length - LM_VECTOR, length - LM_VECTOR, own,                               \
                                 out + i + length - LM_VECTOR);                                                        \
            else if (at < length) {                                                                                    \
                type rest[LM_VECTOR] = {0};                                                                            \
                uint8_t codes[LM_VECTOR];                                                                              \
                memcpy(rest, x + i, length * sizeof(type));                                                            \
                run_block_##name(c, rest, 0, own, codes);                                                              \
                memcpy(out + i, codes, length);                                                                        \
            }                                                                                                          \
        }                                                                                                              \
    }                                                                                                                  \
                                                                                                                       \
    LM_TARGET static void channels_##name(const lm_channels *c, const void *x, size_t n, uint8_t out[])                \
    {                                                                                                                  \
        if (c->step != NULL)                                                                                           \
            runs_##name(c, x, n, out, true);                                                                           \
        else                                                                                                           \
            runs_##name(c, x, n, out, false);                                                                          \
    }

CHANNELS(i8, int8_t, int8_t, AS_KEY, AS_KEY, NEVER)
CHANNELS(u8, uint8_t, int8_t, TURNED, TURNED, NEVER)
CHANNELS(i16, int16_t, int16_t, AS_KEY, AS_KEY, NEVER)
CHANNELS(u16, uint16_t, int16_t, TURNED, TURNED, NEVER)
CHANNELS(i32, int32_t, int32_t, AS_KEY, AS_KEY, NEVER)
CHANNELS(u32, uint32_t, int32_t, TURNED, TURNED, NEVER)
CHANNELS(i64, int64_t, int64_t, AS_KEY, AS_KEY, NEVER)
CHANNELS(u64, uint64_t, int64_t, TURNED, TURNED, NEVER)
CHANNELS(f16, uint16_t, int16_t, F16_KEY, AS_KEY, F16_NAN)
CHANNELS(f32, float, int32_t, AS_KEY, AS_KEY, UNEQUAL)
CHANNELS(f64, double, int64_t, AS_KEY, AS_KEY, UNEQUAL)
