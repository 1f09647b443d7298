/* Decisions counted by true state in the pass that makes them. */
#include "kernels.h"

#include <math.h>
#include <string.h>

#include "../numeric/fault.h"
#include "../numeric/memory.h"

enum {
    BLOCK = LM_COUNTED_READINGS,
    COPIES =
        4, /* of a small table: neighbouring readings often meet the same cell, and an addition waits for the last */
    SMALL = 1024, /* cells of a table that is copied */
};

/* True states as bytes, 255 for what is none; a copy even of bytes, so that the count below cannot leave its table. */
#define NARROW(code, name, type)                                                                                       \
    static void narrow_##name(const char *truth, ptrdiff_t stride, size_t n, uint32_t states, uint8_t out[])           \
    {                                                                                                                  \
        for (size_t i = 0; i < n; i++, truth += stride) {                                                              \
            type value;                                                                                                \
            memcpy(&value, truth, sizeof value);                                                                       \
            out[i] = (uint64_t)value < states ? (uint8_t)value : 255; /* negative is huge */                           \
        }                                                                                                              \
    }
NARROW(I8, i8, int8_t)
NARROW(I16, i16, int16_t)
NARROW(U16, u16, uint16_t)
NARROW(I32, i32, int32_t)
NARROW(U32, u32, uint32_t)
NARROW(I64, i64, int64_t)
NARROW(U64, u64, uint64_t)

static void narrow_u8(const char *truth, ptrdiff_t stride, size_t n, uint32_t states, uint8_t out[])
{
    for (size_t i = 0; i < n; i++) {
        uint8_t value = (uint8_t)truth[(ptrdiff_t)i * stride];
        out[i] = value < states ? value : 255;
    }
}

typedef void narrow(const char *truth, ptrdiff_t stride, size_t n, uint32_t states, uint8_t out[]);
static narrow *const narrow_of[] = {narrow_i8,  narrow_u8,  narrow_i16, narrow_u16,
                                    narrow_i32, narrow_u32, narrow_i64, narrow_u64};
_Static_assert(LM_U64 == 7, "truth is an integer, and the integers come first");

/* The value of a truth, for the message that refuses it. */
static double truth_value(lm_reading reading, const void *truth)
{
    switch (reading) {
#define VALUE(code, name, type)                                                                                        \
    case LM_##code: {                                                                                                  \
        type value;                                                                                                    \
        memcpy(&value, truth, sizeof value);                                                                           \
        return (double)value;                                                                                          \
    }
        LM_READINGS(VALUE)
    default:
        return NAN;
    }
}

static bool holds_255(const uint8_t byte[], size_t n)
{
    uint8_t most = 0;
    for (size_t i = 0; i < n; i++)
        most = byte[i] > most ? byte[i] : most;
    return most == 255;
}

static void count_block(const uint8_t code[], const uint8_t truth[], size_t n, uint32_t states, uint32_t *cell,
                        size_t copy)
{
    size_t i = 0;
    for (; i + COPIES <= n; i += COPIES)
        for (size_t c = 0; c < COPIES; c++)
            cell[c * copy + code[i + c] * states + truth[i + c]]++;
    for (; i < n; i++)
        cell[code[i] * states + truth[i]]++;
}

lm_status lm_slicer_tally(const lm_slicer *slicer, const void *x, ptrdiff_t stride, bool swapped, size_t n,
                          const void *truth, ptrdiff_t truth_stride, lm_reading truth_reading, uint32_t decisions,
                          uint32_t states, uint8_t *store, ptrdiff_t store_stride, uint64_t counts[], lm_fault *fault)
{
    if (n > UINT32_MAX) /* cells are 32 bits wide; longer arrays come in parts */
        return lm_refuse(fault, LM_SIZE, "the number of readings of a part", (double)n, -1, "below 2^32");
    if (truth != NULL && truth_reading > LM_U64)
        return lm_refuse(fault, LM_DOMAIN, "the type of truth", (double)truth_reading, -1, "an integer type");
    size_t cells = ((size_t)decisions + 1) * states;
    lm_count_kernel *count = cells <= LM_COUNTED_CELLS ? slicer->kernels->count : NULL;
    size_t copy = cells <= SMALL ? cells : 0;
    uint32_t *cell = lm_allocate_zeroed(copy > 0 ? cells * COPIES : cells, sizeof *cell);
    if (cell == NULL)
        return LM_NO_MEMORY;
    _Alignas(64) uint8_t code[BLOCK], state[BLOCK] = {0};
    _Alignas(64) uint64_t part[LM_COUNTED_CELLS][8] = {{0}};
    lm_status status = LM_OK;
    for (size_t done = 0; done < n; done += BLOCK) {
        size_t now = n - done < BLOCK ? n - done : BLOCK;
        lm_slicer_decide(slicer, (const char *)x + (ptrdiff_t)done * stride, stride, swapped, now, code, 1);
        const char *true_at = (const char *)truth + (ptrdiff_t)done * truth_stride;
        bool bytes = truth == NULL || (truth_reading <= LM_U8 && truth_stride == 1);
        const uint8_t *known = truth != NULL && bytes ? (const uint8_t *)true_at : state;
        if (truth != NULL && !bytes)
            narrow_of[truth_reading](true_at, truth_stride, now, states, state);
        if (count == NULL || !count(code, known, now, decisions + 1, states, part)) {
            if (truth != NULL)
                narrow_of[truth_reading](true_at, truth_stride, now, states, state);
            size_t at = 0;
            if (truth != NULL && holds_255(state, now)) {
                while (state[at] != 255)
                    at++;
                double value = truth_value(truth_reading, true_at + (ptrdiff_t)at * truth_stride);
                status = lm_refuse(fault, LM_DOMAIN, "truth", value, -1, "numbers of states, from 0");
                break;
            }
            count_block(code, state, now, states, cell, copy);
        }
        for (size_t i = 0; store != NULL && i < now; i++)
            store[(ptrdiff_t)(done + i) * store_stride] = code[i] == decisions ? 255 : code[i];
    }
    for (size_t i = 0; i < cells && status == LM_OK; i++) {
        for (size_t c = 0; c < (copy > 0 ? COPIES : 1); c++)
            counts[i] += cell[c * copy + i];
        for (size_t p = 0; count != NULL && p < 8; p++)
            counts[i] += part[i][p];
    }
    lm_release(cell);
    return status;
}
