/* A function of the reading by a compiled table: which segment, then that segment's polynomial; exact where there is no
 * segment. */
#include "kernels.h"

#include <math.h>
#include <string.h>

#include "../numeric/fault.h"
#include "../numeric/memory.h"

enum { BLOCK = 1024, OUTSIDE = 254, LOST = 255 };

#include "soft_body.h"

void lm_soft_f32_plain(const float coefficient[][LM_SOFT_SEGMENTS], size_t segments, const float x[],
                       const uint8_t segment[], size_t n, float out[])
{
    (void)segments;
    evaluate_f32(coefficient, x, segment, n, out);
}

void lm_soft_f64_plain(const double coefficient[][LM_SOFT_SEGMENTS], size_t segments, const double x[],
                       const uint8_t segment[], size_t n, double out[])
{
    (void)segments;
    evaluate_f64(coefficient, x, segment, n, out);
}

double lm_soft_polynomial(const double coefficient[LM_SOFT_DEGREE + 3], double x)
{
    const double t = (x - coefficient[LM_SOFT_CENTRE]) * coefficient[LM_SOFT_STRETCH];
    double sum = coefficient[LM_SOFT_DEGREE];
    for (int k = LM_SOFT_DEGREE - 1; k >= 0; k--)
        sum = sum * t + coefficient[k];
    return sum;
}

float lm_soft_polynomial_single(const float coefficient[LM_SOFT_DEGREE + 3], float x)
{
    const float t = (x - coefficient[LM_SOFT_CENTRE]) * coefficient[LM_SOFT_STRETCH];
    float sum = coefficient[LM_SOFT_DEGREE];
    for (int k = LM_SOFT_DEGREE - 1; k >= 0; k--)
        sum = sum * t + coefficient[k];
    return sum;
}

lm_status lm_soft_new(const lm_soft_plan *plan, lm_soft **out)
{
    *out = NULL;
    if (plan->count > LM_SOFT_MOST)
        return LM_SIZE;
    void *block = lm_allocate_zeroed(1, sizeof(lm_soft) + _Alignof(lm_soft));
    if (block == NULL)
        return LM_NO_MEMORY;
    lm_soft *soft = (void *)((char *)block + (_Alignof(lm_soft) - (uintptr_t)block % _Alignof(lm_soft)));
    soft->block = block;
    double level[LM_SOFT_MOST + 1] = {0};
    uint8_t code[LM_SOFT_MOST + 2] = {OUTSIDE};
    for (size_t s = 0; s <= plan->count && plan->count > 0; s++) {
        level[s] = plan->edge[s];
        code[s + 1] = s < plan->count && !plan->hole[s] ? (uint8_t)s : OUTSIDE;
    }
    soft->count = plan->count;
    soft->single = plan->single;
    soft->exact = plan->exact;
    soft->context = plan->context;
    soft->origin = plan->origin;
    soft->step = plan->step;
    soft->direct_count = plan->direct_count;
    soft->direct = lm_allocate(plan->direct_count, sizeof *soft->direct);
    if (soft->direct == NULL) {
        lm_soft_free(soft);
        return LM_NO_MEMORY;
    }
    if (plan->direct_count > 0)
        memcpy(soft->direct, plan->direct, plan->direct_count * sizeof *soft->direct);
    size_t levels = plan->count > 0 ? plan->count + 1 : 0;
    lm_status status = lm_slicer_init(&soft->narrow, LM_F32, level, levels, code, LOST, NULL);
    if (status == LM_OK)
        status = lm_slicer_init(&soft->wide, LM_F64, level, levels, code, LOST, NULL);
    for (size_t s = 0; s < plan->count; s++)
        for (int k = 0; k < LM_SOFT_ROWS; k++) {
            soft->coefficient[k][s] = plan->coefficient[s][k];
            soft->single_coefficient[k][s] = plan->single_coefficient[s][k];
        }
    if (status != LM_OK)
        lm_soft_free(soft);
    else
        *out = soft;
    return status;
}

void lm_soft_free(lm_soft *soft)
{
    if (soft == NULL)
        return;
    lm_release(soft->direct);
    lm_release(soft->block);
}

size_t lm_soft_segments(const lm_soft *soft)
{
    return soft->count;
}

lm_range lm_soft_span(const lm_soft *soft)
{
    double edge[2] = {NAN, NAN};
    if (soft->count > 0) {
        memcpy(&edge[0], soft->wide.level, sizeof edge[0]);
        memcpy(&edge[1], soft->wide.level + soft->count * sizeof edge[1], sizeof edge[1]);
    }
    return (lm_range){edge[0], edge[1]};
}

/* Readings outside the table, and NaN, a few at a time; the rest of the block is right already. */
#define MEND(name, type)                                                                                               \
    static lm_status mend_##name(const lm_soft *soft, const type x[], const uint8_t segment[], size_t n, type out[])   \
    {                                                                                                                  \
        double at[64], value[64];                                                                                      \
        size_t place[64], count = 0;                                                                                   \
        for (size_t i = 0; i <= n; i++) {                                                                              \
            if (count == LM_LENGTH(at) || (i == n && count > 0)) {                                                     \
                LM_TRY(soft->exact(soft->context, at, value, count));                                                  \
                for (size_t k = 0; k < count; k++)                                                                     \
                    out[place[k]] = (type)value[k];                                                                    \
                count = 0;                                                                                             \
            }                                                                                                          \
            if (i < n && segment[i] == LOST)                                                                           \
                out[i] = (type)NAN;                                                                                    \
            if (i < n && segment[i] == OUTSIDE) {                                                                      \
                place[count] = i;                                                                                      \
                at[count++] = (double)x[i];                                                                            \
            }                                                                                                          \
        }                                                                                                              \
        return LM_OK;                                                                                                  \
    }
MEND(f32, float)
MEND(f64, double)

static bool needs_mending(const uint8_t segment[], size_t n)
{
    uint8_t most = 0;
    for (size_t i = 0; i < n; i++)
        most = segment[i] > most ? segment[i] : most;
    return most >= OUTSIDE;
}

static lm_status block_f32(const lm_soft *soft, const float x[], size_t n, float out[])
{
    _Alignas(64) uint8_t segment[BLOCK];
    lm_slicer_decide(&soft->narrow, x, sizeof *x, false, n, segment, 1);
    soft->narrow.kernels->soft_f32(soft->single_coefficient, soft->count, x, segment, n, out);
    return needs_mending(segment, n) ? mend_f32(soft, x, segment, n, out) : LM_OK;
}

/* On a lattice the place in the table is the number of the point; a reading beside the points is nobody's. */
static lm_status block_direct(const lm_soft *soft, const double x[], size_t n, double out[])
{
    for (size_t i = 0; i < n; i++) {
        double place = (x[i] - soft->origin) / soft->step;
        if (place >= 0 && place < (double)soft->direct_count && place == floor(place))
            out[i] = soft->direct[(size_t)place];
        else
            LM_TRY(soft->exact(soft->context, &x[i], &out[i], 1));
    }
    return LM_OK;
}

static lm_status block_f64(const lm_soft *soft, const double x[], size_t n, double out[])
{
    if (soft->direct_count > 0)
        return block_direct(soft, x, n, out);
    _Alignas(64) uint8_t segment[BLOCK];
    lm_slicer_decide(&soft->wide, x, sizeof *x, false, n, segment, 1);
    soft->wide.kernels->soft_f64(soft->coefficient, soft->count, x, segment, n, out);
    return needs_mending(segment, n) ? mend_f64(soft, x, segment, n, out) : LM_OK;
}

/* ---- readings of any type and layout to float or double ---- */

#define WIDEN(name, type, to)                                                                                          \
    static void widen_##name##_##to(const char *x, ptrdiff_t stride, size_t n, to out[])                               \
    {                                                                                                                  \
        for (size_t i = 0; i < n; i++, x += stride) {                                                                  \
            type value;                                                                                                \
            memcpy(&value, x, sizeof value);                                                                           \
            out[i] = (to)value;                                                                                        \
        }                                                                                                              \
    }
#define WIDEN_BOTH(code, name, type)                                                                                   \
    WIDEN(name, type, float)                                                                                           \
    WIDEN(name, type, double)
WIDEN_BOTH(I8, i8, int8_t)
WIDEN_BOTH(U8, u8, uint8_t)
WIDEN_BOTH(I16, i16, int16_t)
WIDEN_BOTH(U16, u16, uint16_t)
WIDEN_BOTH(I32, i32, int32_t)
WIDEN_BOTH(U32, u32, uint32_t)
WIDEN_BOTH(I64, i64, int64_t)
WIDEN_BOTH(U64, u64, uint64_t)
WIDEN_BOTH(F32, f32, float)
WIDEN_BOTH(F64, f64, double)

/* binary16: the exponent of its bits, moved to binary32, is off by a power of two that a product restores, denormals
 * included; infinity and NaN keep their all-ones exponent. */
static float half_to_float(uint16_t bits)
{
    uint32_t wide = (uint32_t)(bits & 0x7fff) << 13;
    float value;
    if ((bits & 0x7c00) == 0x7c00)
        wide |= 0x7f800000;
    memcpy(&value, &wide, sizeof value);
    if ((bits & 0x7c00) != 0x7c00)
        value *= 0x1p112f;
    return bits >> 15 ? -value : value;
}

static void widen_f16_float(const char *x, ptrdiff_t stride, size_t n, float out[])
{
    for (size_t i = 0; i < n; i++, x += stride) {
        uint16_t bits;
        memcpy(&bits, x, sizeof bits);
        out[i] = half_to_float(bits);
    }
}

static void widen_f16_double(const char *x, ptrdiff_t stride, size_t n, double out[])
{
    for (size_t i = 0; i < n; i++, x += stride) {
        uint16_t bits;
        memcpy(&bits, x, sizeof bits);
        out[i] = (double)half_to_float(bits);
    }
}

typedef void to_floats(const char *x, ptrdiff_t stride, size_t n, float out[]);
typedef void to_doubles(const char *x, ptrdiff_t stride, size_t n, double out[]);
#define TO_FLOATS(code, name, type) widen_##name##_float,
#define TO_DOUBLES(code, name, type) widen_##name##_double,
static to_floats *const floats_of[] = {LM_READINGS(TO_FLOATS)};
static to_doubles *const doubles_of[] = {LM_READINGS(TO_DOUBLES)};

/* Single precision holds these readings as they are. */
static bool fits_single(lm_reading reading)
{
    return reading <= LM_U16 || reading == LM_F16 || reading == LM_F32;
}

/* Steps of the LLR in a signed byte: -127 to 127, -128 for NaN. */
static int8_t quantised(double llr, double per_step)
{
    double steps = nearbyint(llr * per_step);
    return isnan(steps) ? -128 : steps > 127 ? 127 : steps < -127 ? -127 : (int8_t)steps;
}

lm_status lm_soft_values(const lm_soft *soft, lm_reading reading, const void *x, ptrdiff_t stride, bool swapped,
                         size_t n, lm_soft_output output, double step, void *out, ptrdiff_t out_stride)
{
    _Alignas(64) double readings[BLOCK], values[BLOCK];
    _Alignas(64) uint64_t straight[BLOCK];
    const size_t size = lm_reading_size(reading);
    const bool single = soft->single && fits_single(reading) && output != LM_SOFT_F64;
    for (size_t done = 0; done < n;) {
        const size_t now = n - done < BLOCK ? n - done : BLOCK;
        const char *from = (const char *)x + (ptrdiff_t)done * stride;
        char *to = (char *)out + (ptrdiff_t)done * out_stride;
        ptrdiff_t apart = stride;
        if (swapped && size > 1) {
            lm_gather(size, from, stride, true, now, straight);
            from = (const char *)straight;
            apart = (ptrdiff_t)size;
        }
        if (single) {
            float *block = (void *)readings, *result = (void *)values;
            const bool here = reading == LM_F32 && apart == sizeof(float) && (uintptr_t)from % sizeof(float) == 0;
            const bool there =
                output == LM_SOFT_F32 && out_stride == sizeof(float) && (uintptr_t)to % sizeof(float) == 0;
            if (!here)
                floats_of[reading](from, apart, now, block);
            LM_TRY(block_f32(soft, here ? (const void *)from : block, now, there ? (void *)to : result));
            for (size_t i = 0; !there && i < now; i++)
                if (output == LM_SOFT_F32)
                    memcpy(to + (ptrdiff_t)i * out_stride, &result[i], sizeof(float));
                else
                    ((int8_t *)to)[(ptrdiff_t)i * out_stride] = quantised((double)result[i], 1 / step);
        } else {
            const bool here = reading == LM_F64 && apart == sizeof(double) && (uintptr_t)from % sizeof(double) == 0;
            const bool there =
                output == LM_SOFT_F64 && out_stride == sizeof(double) && (uintptr_t)to % sizeof(double) == 0;
            if (!here)
                doubles_of[reading](from, apart, now, readings);
            LM_TRY(block_f64(soft, here ? (const void *)from : readings, now, there ? (void *)to : values));
            if (output == LM_SOFT_F32 && out_stride == sizeof(float))
                for (size_t i = 0; i < now; i++)
                    memcpy(to + i * sizeof(float), &(float){(float)values[i]}, sizeof(float));
            else
                for (size_t i = 0; !there && i < now; i++) {
                    char *at = to + (ptrdiff_t)i * out_stride;
                    if (output == LM_SOFT_F64)
                        memcpy(at, &values[i], sizeof(double));
                    else if (output == LM_SOFT_F32)
                        memcpy(at, &(float){(float)values[i]}, sizeof(float));
                    else
                        *(int8_t *)at = quantised(values[i], 1 / step);
                }
        }
        done += now;
    }
    return LM_OK;
}
