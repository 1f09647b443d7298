/* Interleaved channels, each with its own levels: the tables that the kernels read. */
#include "kernels.h"

#include <math.h>
#include <string.h>

#include "../numeric/fault.h"
#include "../numeric/memory.h"

/* Lanes are signed and as wide as the reading; a code or the step between two fits, modulo 256 in bytes. */
static void store_lane(void *table, size_t size, size_t at, int value)
{
    switch (size) {
    case 1:
        ((int8_t *)table)[at] = (int8_t)(uint8_t)value;
        break;
    case 2:
        ((int16_t *)table)[at] = (int16_t)value;
        break;
    case 4:
        ((int32_t *)table)[at] = value;
        break;
    default:
        ((int64_t *)table)[at] = value;
    }
}

/* A code that no reading can have, since the type ends before its level, is taken from the last one beforehand. */
static bool lay_out_channel(lm_channels *c, size_t channel, const double levels[], const uint8_t codes[])
{
    const size_t size = lm_reading_size(c->reading);
    bool reached = true;
    int last = codes[c->count];
    for (size_t j = 0; j < c->count; j++) {
        bool here = lm_ceiling(c->reading, levels[j], (char *)c->level + (j * c->width + channel) * size);
        if (c->step != NULL)
            store_lane(c->step, size, j * c->width + channel, here ? codes[j] - codes[j + 1] : 0);
        if (!here && reached)
            last = codes[j];
        reached = reached && here;
    }
    if (c->last != NULL)
        store_lane(c->last, size, channel, last);
    return reached;
}

/* The first round of channels, once more for each round of a run. */
static void repeat_rounds(const lm_channels *c, void *table, size_t rows)
{
    const size_t size = lm_reading_size(c->reading);
    for (size_t j = 0; table != NULL && j < rows; j++)
        for (size_t done = c->channels; done < c->width; done += c->channels)
            memcpy((char *)table + (j * c->width + done) * size, (char *)table + j * c->width * size,
                   c->channels * size);
}

lm_status lm_channels_new(lm_channels **out, lm_reading reading, const double levels[], size_t channels, size_t count,
                          const uint8_t codes[], bool shared, uint8_t invalid, lm_fault *fault)
{
    *out = NULL;
    if (count > LM_MAX_LEVELS)
        return lm_refuse(fault, LM_SIZE, "the number of levels", (double)count, -1, "at most 254");
    if (channels == 0)
        return lm_refuse(fault, LM_SIZE, "the number of channels", 0, -1, "at least 1");
    for (size_t i = 0; i < channels * count; i++)
        if (isnan(levels[i]) || (i % count > 0 && levels[i] < levels[i - 1]))
            return lm_refuse(fault, LM_DOMAIN, "levels", levels[i], (ptrdiff_t)i, "ascending numbers in each channel");
    lm_channels *c = lm_allocate_zeroed(1, sizeof *c);
    if (c == NULL)
        return LM_NO_MEMORY;
    const size_t size = lm_reading_size(reading);
    *c = (lm_channels){.kernels = lm_kernels_get(), .reading = reading, .channels = channels, .count = count};
    c->invalid = invalid;
    c->width = channels * ((LM_LEAST_RUN + channels - 1) / channels);
    c->level = lm_allocate(count * c->width, size);
    lm_status status = c->level != NULL ? LM_OK : LM_NO_MEMORY;
    bool reached = status == LM_OK && shared;
    if (reached) {
        memcpy(c->code, codes, count + 1);
        for (size_t i = 0; i < channels; i++)
            reached = lay_out_channel(c, i, levels + i * count, codes) && reached;
    }
    if (status == LM_OK && !reached) {
        c->step = lm_allocate(count * c->width, size);
        c->last = lm_allocate(c->width, size);
        status = c->step != NULL && c->last != NULL ? LM_OK : LM_NO_MEMORY;
        for (size_t i = 0; status == LM_OK && i < channels; i++)
            lay_out_channel(c, i, levels + i * count, shared ? codes : codes + i * (count + 1));
    }
    if (status != LM_OK) {
        lm_channels_free(c);
        return status;
    }
    repeat_rounds(c, c->level, count);
    repeat_rounds(c, c->step, count);
    repeat_rounds(c, c->last, 1);
    *out = c;
    return LM_OK;
}

void lm_channels_free(lm_channels *channels)
{
    if (channels == NULL)
        return;
    lm_release(channels->level);
    lm_release(channels->step);
    lm_release(channels->last);
    lm_release(channels);
}

size_t lm_channels_width(const lm_channels *channels)
{
    return channels->width;
}

void lm_channels_decide(const lm_channels *channels, const void *x, size_t n, uint8_t *out)
{
    channels->kernels->channels[channels->reading](channels, x, n, out);
}
