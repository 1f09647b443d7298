/* Levels made ready for one type of reading, and the walk over arrays that are not what a kernel wants. */
#include "kernels.h"

#include <math.h>
#include <string.h>

#include "../numeric/fault.h"

#define LM_SIZE_OF(code, name, type) sizeof(type),
static const uint8_t size_of[] = {LM_READINGS(LM_SIZE_OF)};
#undef LM_SIZE_OF

size_t lm_reading_size(lm_reading reading)
{
    return size_of[reading];
}

/* ---- the smallest value of a type that is not below a level; false when there is none ---- */

/* Bounds as doubles: low is exact, and no double lies strictly between the largest value and high. */
#define CEILING_OF_INTEGER(name, type, low, high, max)                                                                 \
    static bool ceiling_##name(double level, void *out)                                                                \
    {                                                                                                                  \
        double up = ceil(level);                                                                                       \
        if (up >= (high))                                                                                              \
            return false;                                                                                              \
        type value = up <= (low) ? (type)(low) : (type)up;                                                             \
        memcpy(out, &value, sizeof value);                                                                             \
        return true;                                                                                                   \
    }                                                                                                                  \
    static void largest_##name(void *out)                                                                              \
    {                                                                                                                  \
        type value = (max);                                                                                            \
        memcpy(out, &value, sizeof value);                                                                             \
    }
CEILING_OF_INTEGER(i8, int8_t, -0x1p7, 0x1p7, INT8_MAX)
CEILING_OF_INTEGER(u8, uint8_t, 0.0, 0x1p8, UINT8_MAX)
CEILING_OF_INTEGER(i16, int16_t, -0x1p15, 0x1p15, INT16_MAX)
CEILING_OF_INTEGER(u16, uint16_t, 0.0, 0x1p16, UINT16_MAX)
CEILING_OF_INTEGER(i32, int32_t, -0x1p31, 0x1p31, INT32_MAX)
CEILING_OF_INTEGER(u32, uint32_t, 0.0, 0x1p32, UINT32_MAX)
CEILING_OF_INTEGER(i64, int64_t, -0x1p63, 0x1p63, INT64_MAX)
CEILING_OF_INTEGER(u64, uint64_t, 0.0, 0x1p64, UINT64_MAX)

/* Past the levels: what only the largest reading reaches. */
static void largest_f64(void *out)
{
    memcpy(out, &(double){INFINITY}, sizeof(double));
}

static void largest_f32(void *out)
{
    memcpy(out, &(float){INFINITY}, sizeof(float));
}

static void largest_f16(void *out)
{
    memcpy(out, &(int16_t){LM_F16_INFINITY}, sizeof(int16_t));
}

static bool ceiling_f64(double level, void *out)
{
    memcpy(out, &level, sizeof level);
    return true;
}

static bool ceiling_f32(double level, void *out)
{
    float value = (float)level; /* rounds to nearest, or to infinity */
    if ((double)value < level)
        value = nextafterf(value, INFINITY);
    memcpy(out, &value, sizeof value);
    return true;
}

/* As a key of lm_f16_key. The magnitude in units of 2^-24 (the denormal step) is exact in a double; a normal number
 * keeps 11 bits. */
static bool ceiling_f16(double level, void *out)
{
    double size = fabs(level);
    bool down = signbit(level) != 0; /* towards zero is up for a negative level */
    int32_t bits;
    if (size > 65504.0) {
        bits = isinf(size) || !down ? LM_F16_INFINITY : LM_F16_INFINITY - 1;
    } else if (size == 0) {
        bits = 0;
    } else {
        int exponent = 0;
        frexp(size, &exponent);                          /* size < 2^exponent */
        int step = exponent > -14 ? exponent - 11 : -24; /* of the grid that size lies on */
        double units = ldexp(size, -step);
        units = down ? floor(units) : ceil(units);
        /* units may be 2048, the first of the next binade: the carry into the exponent makes the right bits */
        bits = (int32_t)units + (step > -24 ? (step + 24) * 1024 : 0);
    }
    int16_t key = down || bits == 0 ? (int16_t)(-bits - 1) : (int16_t)bits; /* a level at zero is at -0 */
    memcpy(out, &key, sizeof key);
    return true;
}

typedef bool ceiling(double level, void *out);
typedef void largest(void *out);
#define LM_CEILING(code, name, type) ceiling_##name,
static ceiling *const ceiling_of[] = {LM_READINGS(LM_CEILING)};
#undef LM_CEILING
#define LM_LARGEST(code, name, type) largest_##name,
static largest *const largest_of[] = {LM_READINGS(LM_LARGEST)};
#undef LM_LARGEST

bool lm_ceiling(lm_reading reading, double level, void *out)
{
    bool reached = ceiling_of[reading](level, out);
    if (!reached)
        largest_of[reading](out);
    return reached;
}

/* ---- layouts ---- */

static uint32_t reversed(uint32_t path, uint32_t depth)
{
    uint32_t k = 0;
    for (uint32_t s = 0; s < depth; s++)
        k |= ((path >> s) & 1u) << (depth - 1 - s);
    return k;
}

/* The search compares with node[step][path so far] and sets bit `step` of the path when x >= it, so that the low bits
 * of the path index the next step's nodes. */
static void lay_out_search(lm_slicer *s, size_t size)
{
    const bool is_unsigned = s->reading == LM_U16 || s->reading == LM_U32 || s->reading == LM_U64;
    for (uint32_t step = 0; step < s->depth; step++) {
        uint8_t *nodes = s->node + lm_node_offset(step, size);
        size_t filled = (size_t)1 << step;
        for (uint32_t path = 0; path < filled; path++) {
            uint32_t k = reversed(path, s->depth) + (1u << (s->depth - 1 - step)) - 1;
            memcpy(nodes + path * size, s->level + k * size, size);
            if (is_unsigned && size > 1)
                nodes[path * size + size - 1] ^= 0x80; /* little-endian, as all that search are */
        }
        for (; filled * size < 64; filled *= 2) /* repeat, so that every lane is defined */
            memcpy(nodes + filled * size, nodes, filled * size);
    }
    for (uint32_t path = 0; path < 1u << s->depth; path++)
        s->found[path] = s->code[reversed(path, s->depth)];
}

static void lay_out_table(lm_slicer *s)
{
    uint32_t k = 0;
    for (int i = 0; i < 256; i++) {
        int value = s->reading == LM_I8 ? i - 128 : i;
        while (k < s->count && (s->reading == LM_I8 ? (int8_t)s->level[k] : s->level[k]) <= value)
            k++;
        s->table[(uint8_t)value] = s->code[k];
    }
}

lm_status lm_slicer_init(lm_slicer *out, lm_reading reading, const double levels[], size_t count, const uint8_t codes[],
                         uint8_t invalid, lm_fault *fault)
{
    if (count > LM_MAX_LEVELS)
        return lm_refuse(fault, LM_SIZE, "the number of levels", (double)count, -1, "at most 254");
    for (size_t i = 0; i < count; i++)
        if (isnan(levels[i]) || (i > 0 && levels[i] < levels[i - 1]))
            return lm_refuse(fault, LM_DOMAIN, "levels", levels[i], (ptrdiff_t)i, "ascending numbers");
    out->kernels = lm_kernels_get();
    out->reading = reading;
    out->invalid = invalid;

    size_t size = size_of[reading];
    uint32_t reached = 0;
    while (reached < count && ceiling_of[reading](levels[reached], out->level + reached * size))
        reached++;
    out->count = reached;
    out->depth = 1;
    while (1u << out->depth <= reached)
        out->depth++;
    if (out->kernels->searches && (out->depth == 5 || out->depth == 7))
        out->depth++; /* they are made for these depths: 1, 2, 3, 4, 6, 8 */
    for (uint32_t i = reached; i < (1u << out->depth) - 1; i++)
        largest_of[reading](out->level + i * size);

    out->plain = invalid == 255;
    for (uint32_t k = 0; k < 1u << out->depth; k++) {
        out->code[k] = codes[k < reached ? k : reached];
        out->plain = out->plain && (k > reached || out->code[k] == k);
    }
    if (out->kernels->searches)
        lay_out_search(out, size);
    if (size == 1)
        lay_out_table(out);
    return LM_OK;
}

/* ---- arrays ---- */

enum { BLOCK = 2048 }; /* readings converted at a time: 16 KiB of the widest, half of the smallest first-level cache */

#define GATHER(bits, swap)                                                                                             \
    static void gather_##bits(const char *x, ptrdiff_t stride, bool swapped, size_t n, uint##bits##_t to[])            \
    {                                                                                                                  \
        for (size_t i = 0; i < n; i++, x += stride) {                                                                  \
            uint##bits##_t value;                                                                                      \
            memcpy(&value, x, sizeof value);                                                                           \
            to[i] = swapped ? swap(value) : value;                                                                     \
        }                                                                                                              \
    }
#define AS_IS(value) (value)
GATHER(8, AS_IS)
GATHER(16, __builtin_bswap16)
GATHER(32, __builtin_bswap32)
GATHER(64, __builtin_bswap64)

void lm_gather(size_t size, const char *x, ptrdiff_t stride, bool swapped, size_t n, void *to)
{
    switch (size) {
    case 1:
        gather_8(x, stride, swapped, n, to);
        break;
    case 2:
        gather_16(x, stride, swapped, n, to);
        break;
    case 4:
        gather_32(x, stride, swapped, n, to);
        break;
    default:
        gather_64(x, stride, swapped, n, to);
    }
}

void lm_slicer_decide(const lm_slicer *slicer, const void *x, ptrdiff_t stride, bool swapped, size_t n, uint8_t *out,
                      ptrdiff_t out_stride)
{
    size_t size = size_of[slicer->reading];
    lm_decide_kernel *decide = slicer->kernels->decide[slicer->reading];
    bool direct = (stride == (ptrdiff_t)size || n == 1) && !(swapped && size > 1) && (uintptr_t)x % size == 0;
    if (direct && (out_stride == 1 || n == 1)) {
        decide(slicer, x, n, out);
        return;
    }
    _Alignas(64) uint64_t readings[BLOCK];
    _Alignas(64) uint8_t codes[BLOCK];
    for (size_t done = 0; done < n;) {
        size_t now = n - done < BLOCK ? n - done : BLOCK;
        const char *from = (const char *)x + (ptrdiff_t)done * stride;
        uint8_t *to = out + (ptrdiff_t)done * out_stride;
        if (!direct)
            lm_gather(size, from, stride, swapped, now, readings);
        decide(slicer, direct ? (const void *)from : readings, now, out_stride == 1 ? to : codes);
        if (out_stride != 1)
            for (size_t i = 0; i < now; i++)
                to[(ptrdiff_t)i * out_stride] = codes[i];
        done += now;
    }
}
