/* Codes 0 and 1 packed to one bit a reading. */
#include "kernels.h"

enum { BLOCK = 4096 };

/* Eight codes to a byte by one multiplication: bit 0 of byte i lands at bit 56 + i, or 63 - i, and nothing overlaps. */
void lm_pack_plain(const uint8_t code[], size_t bytes, uint8_t out[], bool big)
{
    const uint64_t spread = big ? 0x8040201008040201u : 0x0102040810204080u;
    for (size_t i = 0; i < bytes; i++) {
        uint64_t eight = 0;
        for (int b = 0; b < 8; b++)
            eight |= (uint64_t)(code[8 * i + (size_t)b] & 1) << 8 * b;
        out[i] = (uint8_t)(eight * spread >> 56);
    }
}

size_t lm_slicer_pack(const lm_slicer *slicer, const void *x, ptrdiff_t stride, bool swapped, size_t n, bool big,
                      uint8_t *out)
{
    size_t size = lm_reading_size(slicer->reading);
    lm_bits_kernel *at_once = slicer->depth <= 2 ? slicer->kernels->bits[slicer->reading] : NULL;
    if (at_once != NULL && stride == (ptrdiff_t)size && !swapped && (uintptr_t)x % size == 0)
        return at_once(slicer, x, n, out, big);
    _Alignas(64) uint8_t code[BLOCK];
    size_t lost = 0;
    for (size_t done = 0; done < n; done += BLOCK) {
        size_t now = n - done < BLOCK ? n - done : BLOCK, bytes = (now + 7) / 8;
        lm_slicer_decide(slicer, (const char *)x + (ptrdiff_t)done * stride, stride, swapped, now, code, 1);
        for (size_t i = now; i < 8 * bytes; i++)
            code[i] = 0;
        slicer->kernels->pack(code, bytes, out + done / 8, big);
        uint8_t any = 0;
        for (size_t i = 0; i < now; i++)
            any |= code[i];
        for (size_t i = 0; any >= 0x80 && i < now; i++)
            lost += code[i] >> 7;
    }
    return lost;
}
