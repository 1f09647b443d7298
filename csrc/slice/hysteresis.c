/* Decisions that stay until a reading has left the band around a level. */
#include "kernels.h"

#include <math.h>

#include "../numeric/fault.h"

enum { BLOCK = 2048 };

void lm_hysteresis_decide(const lm_hysteresis *h, const void *x, ptrdiff_t stride, bool swapped, size_t n,
                          uint8_t *interval, uint8_t *out, ptrdiff_t out_stride)
{
    _Alignas(64) uint8_t least[BLOCK], most[BLOCK];
    unsigned now_in = *interval;
    for (size_t done = 0; done < n; done += BLOCK) {
        size_t now = n - done < BLOCK ? n - done : BLOCK;
        const char *from = (const char *)x + (ptrdiff_t)done * stride;
        if (now_in == LM_NO_INTERVAL) { /* the first reading that is a number starts, by the bare levels */
            lm_slicer_decide(&h->bare, from, stride, swapped, now, least, 1);
            for (size_t i = 0; i < now && now_in == LM_NO_INTERVAL; i++)
                now_in = least[i];
        }
        /* a level is passed upwards at its upper edge and downwards below its lower one: the interval moves only as far
         * as it must */
        lm_slicer_decide(&h->up, from, stride, swapped, now, least, 1);
        lm_slicer_decide(&h->down, from, stride, swapped, now, most, 1);
        uint8_t *to = out + (ptrdiff_t)done * out_stride;
        for (size_t i = 0; i < now; i++) {
            if (least[i] == LM_NO_INTERVAL) {
                to[(ptrdiff_t)i * out_stride] = h->invalid;
                continue;
            }
            now_in = now_in > most[i] ? most[i] : now_in;
            now_in = now_in < least[i] ? least[i] : now_in;
            to[(ptrdiff_t)i * out_stride] = h->code[now_in];
        }
    }
    *interval = (uint8_t)now_in;
}

lm_status lm_hysteresis_init(lm_hysteresis *out, lm_reading reading, const double levels[], const double widths[],
                             size_t count, const uint8_t codes[], uint8_t invalid, lm_fault *fault)
{
    if (count > LM_MAX_LEVELS)
        return lm_refuse(fault, LM_SIZE, "the number of levels", (double)count, -1, "at most 254");
    double low[LM_MAX_LEVELS], high[LM_MAX_LEVELS];
    uint8_t interval[LM_MAX_LEVELS + 1] = {0};
    for (size_t i = 0; i < count; i++) {
        if (!(widths[i] >= 0) || isinf(widths[i]))
            return lm_refuse(fault, LM_DOMAIN, "width", widths[i], (ptrdiff_t)i, "a finite number of at least 0");
        low[i] = levels[i] - 0.5 * widths[i];
        high[i] = levels[i] + 0.5 * widths[i];
        interval[i + 1] = (uint8_t)(i + 1);
        out->code[i] = codes[i];
        if (i > 0 && levels[i] >= levels[i - 1] && (low[i] < low[i - 1] || high[i] < high[i - 1]))
            return lm_refuse(fault, LM_DOMAIN, "width", widths[i], (ptrdiff_t)i,
                             "bands whose edges ascend as the levels do");
    }
    out->code[count] = codes[count];
    out->invalid = invalid;
    LM_TRY(lm_slicer_init(&out->bare, reading, levels, count, interval, LM_NO_INTERVAL, fault));
    LM_TRY(lm_slicer_init(&out->up, reading, high, count, interval, LM_NO_INTERVAL, fault));
    return lm_slicer_init(&out->down, reading, low, count, interval, LM_NO_INTERVAL, fault);
}
