/* Kernels in plain C, for any compiler and processor: a branchless binary search, one reading at a time. */
#include "kernels.h"

#define SEARCH_BODY(name, type, key_type, KEY, IS_NAN)                                                                 \
    static void decide_##name(const lm_slicer *slicer, const void *readings, size_t n, uint8_t out[])                  \
    {                                                                                                                  \
        const type *x = readings;                                                                                      \
        const key_type *level = (const void *)slicer->level;                                                           \
        for (size_t i = 0; i < n; i++) {                                                                               \
            const key_type key = KEY(x[i]);                                                                            \
            size_t k = 0;                                                                                              \
            for (size_t half = (size_t)1 << (slicer->depth - 1); half > 0; half >>= 1)                                 \
                k += key >= level[k + half - 1] ? half : 0;                                                            \
            out[i] = IS_NAN(x[i]) ? slicer->invalid : slicer->code[k];                                                 \
        }                                                                                                              \
    }
#define AS_IS(x) (x)
#define NEVER(x) false
#define UNEQUAL(x) ((x) != (x))
#define F16_NAN(x) (((x) & 0x7fff) > LM_F16_INFINITY)

SEARCH_BODY(i8, int8_t, int8_t, AS_IS, NEVER)
SEARCH_BODY(u8, uint8_t, uint8_t, AS_IS, NEVER)
SEARCH_BODY(i16, int16_t, int16_t, AS_IS, NEVER)
SEARCH_BODY(u16, uint16_t, uint16_t, AS_IS, NEVER)
SEARCH_BODY(i32, int32_t, int32_t, AS_IS, NEVER)
SEARCH_BODY(u32, uint32_t, uint32_t, AS_IS, NEVER)
SEARCH_BODY(i64, int64_t, int64_t, AS_IS, NEVER)
SEARCH_BODY(u64, uint64_t, uint64_t, AS_IS, NEVER)
SEARCH_BODY(f16, uint16_t, int16_t, lm_f16_key, F16_NAN)
SEARCH_BODY(f32, float, float, AS_IS, UNEQUAL)
SEARCH_BODY(f64, double, double, AS_IS, UNEQUAL)

static bool usable(void)
{
    return true;
}

#define CHANNEL_BODY(name, type, key_type, lane, KEY, IS_NAN)                                                          \
    static void channels_##name(const lm_channels *c, const void *readings, size_t n, uint8_t out[])                   \
    {                                                                                                                  \
        const type *x = readings;                                                                                      \
        const key_type *level = c->level;                                                                              \
        const lane *step = c->step, *last = c->last;                                                                   \
        for (size_t i = 0; i < n; i++) {                                                                               \
            const size_t at = i % c->width;                                                                            \
            lane sum = step != NULL ? last[at] : (lane)c->code[c->count];                                              \
            for (size_t j = 0; j < c->count; j++)                                                                      \
                if (KEY(x[i]) < level[j * c->width + at])                                                              \
                    sum = (lane)(sum + (step != NULL ? step[j * c->width + at] : c->code[j] - c->code[j + 1]));        \
            out[i] = IS_NAN(x[i]) ? c->invalid : (uint8_t)sum;                                                         \
        }                                                                                                              \
    }
CHANNEL_BODY(i8, int8_t, int8_t, int8_t, AS_IS, NEVER)
CHANNEL_BODY(u8, uint8_t, uint8_t, int8_t, AS_IS, NEVER)
CHANNEL_BODY(i16, int16_t, int16_t, int16_t, AS_IS, NEVER)
CHANNEL_BODY(u16, uint16_t, uint16_t, int16_t, AS_IS, NEVER)
CHANNEL_BODY(i32, int32_t, int32_t, int32_t, AS_IS, NEVER)
CHANNEL_BODY(u32, uint32_t, uint32_t, int32_t, AS_IS, NEVER)
CHANNEL_BODY(i64, int64_t, int64_t, int64_t, AS_IS, NEVER)
CHANNEL_BODY(u64, uint64_t, uint64_t, int64_t, AS_IS, NEVER)
CHANNEL_BODY(f16, uint16_t, int16_t, int16_t, lm_f16_key, F16_NAN)
CHANNEL_BODY(f32, float, float, int32_t, AS_IS, UNEQUAL)
CHANNEL_BODY(f64, double, double, int64_t, AS_IS, UNEQUAL)

#define LM_CHANNELS(code, name, type) [LM_##code] = channels_##name,
#define LM_SLOT(code, name, type) [LM_##code] = decide_##name,
const lm_kernels lm_kernels_portable = {.name = "portable",
                                        .usable = usable,
                                        .decide = {LM_READINGS(LM_SLOT)},
                                        .channels = {LM_READINGS(LM_CHANNELS)},
                                        .soft_f32 = lm_soft_f32_plain,
                                        .soft_f64 = lm_soft_f64_plain,
                                        .pack = lm_pack_plain};
