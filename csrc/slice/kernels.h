/* What a set of kernels provides. One struct an instruction set, one best-first list, one body each. */
#ifndef LM_KERNELS_H
#define LM_KERNELS_H

#include "../limen.h"

/* The codes of n contiguous, aligned readings of the slicer's type. */
typedef void lm_decide_kernel(const lm_slicer *slicer, const void *x, size_t n, uint8_t out[]);

/* Bit 0 of 8 * bytes codes; big: the first reading in the highest bit. */
typedef void lm_pack_kernel(const uint8_t code[], size_t bytes, uint8_t out[], bool big);

lm_pack_kernel lm_pack_plain;

/* Readings to bits at once, for a search of at most two steps; counts codes with bit 7 set. */
typedef size_t lm_bits_kernel(const lm_slicer *slicer, const void *x, size_t n, uint8_t out[], bool big);

/* Adds n pairs (code, state) to the eight parts of cell[code * states + state], aligned to 64 bytes, with at most so
 * many of each; false, and nothing added, when one is out of range. */
#define LM_COUNTED_CELLS 40
#define LM_COUNTED_READINGS 1024
typedef bool lm_count_kernel(const uint8_t code[], const uint8_t truth[], size_t n, uint32_t decisions, uint32_t states,
                             uint64_t cell[][8]);

/* Interleaved channels, each with its own levels. Tables are as long as a run of whole rounds of channels, which is
 * wide enough for any register. */
enum { LM_LEAST_RUN = 256 };

struct lm_channels {
    const struct lm_kernels *kernels;
    lm_reading reading;
    size_t channels, width, count; /* width: readings of a run; count: levels of each channel */
    uint8_t invalid;
    uint8_t code[LM_MAX_LEVELS + 1]; /* where all channels share them */
    void *level;                     /* of the reading's type (keys for binary16), [count][width] */
    void *step, *last;               /* signed and as wide: what each level adds when x is below it; the last code. NULL
                                      * where codes are shared */
};

/* n readings, the first of channel 0. */
typedef void lm_channel_kernel(const lm_channels *channels, const void *x, size_t n, uint8_t out[]);

/* Tables of soft values, a row of segments for each number: polynomial in t = (x - centre) * stretch. */
enum {
    LM_SOFT_SEGMENTS = 256,
    LM_SOFT_CENTRE = LM_SOFT_DEGREE + 1,
    LM_SOFT_STRETCH,
    LM_SOFT_ROWS,
};

struct lm_soft {
    _Alignas(64) float single_coefficient[LM_SOFT_ROWS][LM_SOFT_SEGMENTS];
    _Alignas(64) double coefficient[LM_SOFT_ROWS][LM_SOFT_SEGMENTS];
    lm_slicer narrow, wide; /* to the number of the segment */
    size_t count;
    size_t direct_count; /* values at origin + k * step, owned */
    double *direct;
    double origin, step;
    bool single; /* single precision keeps the error bound */
    lm_soft_exact *exact;
    const void *context;
    void *block; /* the allocation that this lies in, aligned */
};

/* The values of n readings in their segments; segments past the table give anything. */
typedef void lm_soft_f32_kernel(const float coefficient[][LM_SOFT_SEGMENTS], size_t segments, const float x[],
                                const uint8_t segment[], size_t n, float out[]);
typedef void lm_soft_f64_kernel(const double coefficient[][LM_SOFT_SEGMENTS], size_t segments, const double x[],
                                const uint8_t segment[], size_t n, double out[]);
lm_soft_f32_kernel lm_soft_f32_plain;
lm_soft_f64_kernel lm_soft_f64_plain;

/* Copies n readings together, swapping their bytes when asked. */
void lm_gather(size_t size, const char *x, ptrdiff_t stride, bool swapped, size_t n, void *to);

typedef struct lm_kernels {
    const char *name;
    bool (*usable)(void);
    bool searches; /* uses lm_slicer.node and lm_slicer.found */
    lm_decide_kernel *decide[LM_READING_END];
    lm_bits_kernel *bits[LM_READING_END]; /* NULL: through codes */
    lm_channel_kernel *channels[LM_READING_END];
    lm_soft_f32_kernel *soft_f32;
    lm_soft_f64_kernel *soft_f64;
    lm_pack_kernel *pack;
    lm_count_kernel *count; /* NULL: one by one */
} lm_kernels;

extern const lm_kernels lm_kernels_portable;
extern const lm_kernels lm_kernels_baseline;
extern const lm_kernels lm_kernels_avx2;
extern const lm_kernels lm_kernels_avx512;

/* The smallest value of the type that is not below a level (a key for binary16); false, and the largest, if none is. */
bool lm_ceiling(lm_reading reading, double level, void *out);

/* The chosen set; the best usable one is chosen by the first call. */
const lm_kernels *lm_kernels_get(void);

/* binary16 bits to an integer that orders as the values do, -0 just below +0, NaN outside +-LM_F16_INFINITY. */
#define LM_F16_INFINITY 0x7c00

static inline int16_t lm_f16_key(uint16_t bits)
{
    return (int16_t)(bits ^ (uint16_t)((0u - (unsigned)(bits >> 15)) & 0x7fffu));
}

/* Steps of a search keep their nodes at whole 64-byte vectors: the first vector of a step, for lanes of this size. */
static inline size_t lm_node_offset(uint32_t step, size_t size)
{
    size_t offset = 0;
    for (uint32_t s = 0; s < step; s++) {
        size_t bytes = size << s;
        offset += bytes < 64 ? 64 : bytes;
    }
    return offset;
}

#endif
