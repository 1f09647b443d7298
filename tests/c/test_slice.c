/* Every set of kernels against the definition (levels reached, compared as doubles or exactly), type by type. */
#include <fenv.h>
#include <stdlib.h>
#include <string.h>

#include "check.h"
#include "limen.h"
#include "slice/kernels.h"

/* A small generator of our own (xorshift64*), so that runs repeat. */
static uint64_t seed = 0x9e3779b97f4a7c15u;

static uint64_t draw(void)
{
    seed ^= seed >> 12;
    seed ^= seed << 25;
    seed ^= seed >> 27;
    return seed * 0x2545f4914f6cdd1du;
}

static double half_value(uint16_t bits)
{
    int exponent = (bits >> 10) & 31;
    double fraction = bits & 1023;
    double size = exponent == 31  ? (fraction > 0 ? NAN : INFINITY)
                  : exponent == 0 ? ldexp(fraction, -24)
                                  : ldexp(1024 + fraction, exponent - 25);
    return bits >> 15 ? -size : size;
}

/* x >= level, exactly; long double holds every 64-bit integer and every double of x86 and of IEEE quad targets. */
static int reaches(lm_reading reading, const void *x, double level)
{
    switch (reading) {
#define REACHES(code, name, type)                                                                                      \
    case LM_##code: {                                                                                                  \
        type value;                                                                                                    \
        memcpy(&value, x, sizeof value);                                                                               \
        return (LM_##code == LM_F16 ? (long double)half_value((uint16_t)value) : (long double)value) >= level;         \
    }
        LM_READINGS(REACHES)
    default:
        return 0;
    }
}

static int is_nan(lm_reading reading, const void *x)
{
    return reading >= LM_F16 && !reaches(reading, x, -INFINITY);
}

static int ascending(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

enum { N = 300 };

/* Readings of random bits, and of the levels' neighbourhoods. */
static void fill(lm_reading reading, const double level[], size_t count, void *x)
{
    size_t size = lm_reading_size(reading);
    for (size_t i = 0; i < N; i++) {
        uint64_t bits = draw();
        double near = count > 0 ? level[draw() % count] : 0.5;
        if (draw() % 2 == 0 && fabs(near) < 100) {
            float single = (float)near;
            double step = (double)(draw() % 3) - 1;
            switch (reading) {
            case LM_F64:
                near = nextafter(near, near + step);
                memcpy(&bits, &near, 8);
                break;
            case LM_F32:
                single = nextafterf(single, single + (float)step);
                memcpy(&bits, &single, 4);
                break;
            case LM_F16:
                break;
            default:
                bits = (uint64_t)(int64_t)(near + step);
            }
        }
        memcpy((char *)x + i * size, &bits, size);
    }
}

static void check_set(const lm_kernels *set, lm_reading reading, size_t count)
{
    double level[LM_MAX_LEVELS];
    uint8_t code[256], out[N + 1], step_out[3 * N];
    int labels = draw() % 2 == 0;
    static _Alignas(64) char x[8 * N], y[24 * N + 1];
    size_t size = lm_reading_size(reading);

    for (size_t j = 0; j < count; j++) {
        double spread = draw() % 4 == 0 ? 1e5 : draw() % 3 == 0 ? 1e-6 : 90;
        level[j] = spread * ((double)(draw() >> 11) * 0x1p-52 - 1);
        if (draw() % 8 == 0)
            level[j] = floor(level[j]);
        if (draw() % 50 == 0)
            level[j] = draw() % 2 == 0 ? INFINITY : -INFINITY;
    }
    qsort(level, count, sizeof level[0], ascending);
    for (size_t j = 0; j <= count; j++)
        code[j] = (uint8_t)(labels ? draw() % 255 : j);
    fill(reading, level, count, x);

    lm_slicer s;
    CHECK(lm_slicer_init(&s, reading, level, count, code, 255, NULL) == LM_OK);
    CHECK(s.kernels == set);
    size_t n = draw() % N;
    out[n] = 77;
    lm_slicer_decide(&s, x, (ptrdiff_t)size, false, n, out, 1);
    CHECK(out[n] == 77);
    size_t wrong = 0;
    for (size_t i = 0; i < n; i++) {
        size_t k = 0;
        while (k < count && reaches(reading, x + i * size, level[k]))
            k++;
        uint8_t wanted = is_nan(reading, x + i * size) ? 255 : code[k];
        wrong += out[i] != wanted;
    }
    if (wrong > 0)
        fprintf(stderr, "%s, reading %d, %zu levels, labels %d, n %zu: %zu wrong\n", set->name, (int)reading, count,
                labels, n, wrong);
    CHECK(wrong == 0);

    /* the same readings swapped, unaligned, three apart and backwards, to codes three apart */
    for (size_t i = 0; i < n; i++)
        for (size_t b = 0; b < size; b++)
            y[1 + 3 * size * (n - 1 - i) + b] = x[i * size + size - 1 - b];
    lm_slicer_decide(&s, n > 0 ? y + 1 + 3 * size * (n - 1) : y, -3 * (ptrdiff_t)size, true, n, step_out, 3);
    wrong = 0;
    for (size_t i = 0; i < n; i++)
        wrong += step_out[3 * i] != out[i];
    CHECK(wrong == 0);
}

int main(int argc, char **argv)
{
    const char *name = argc > 1 ? argv[1] : getenv("LIMEN_CPU");
    if (name != NULL && name[0] != '\0')
        CHECK(lm_kernels_choose(name) == LM_OK);
    CHECK(lm_kernels_choose("abacus") == LM_UNKNOWN);
    const lm_kernels *set = lm_kernels_get();
    CHECK(strcmp(set->name, lm_kernels_chosen()) == 0);
    static const size_t counts[] = {0, 1, 2, 3, 4, 7, 8, 15, 16, 30, 31, 32, 63, 64, 100, 127, 128, 200, 254};
    for (int reading = 0; reading < LM_READING_END; reading++)
        for (size_t c = 0; c < LM_LENGTH(counts); c++)
            for (int repeat = 0; repeat < 6; repeat++)
                check_set(set, (lm_reading)reading, counts[c]);

    lm_slicer s;
    lm_fault fault;
    CHECK(lm_slicer_init(&s, LM_F32, (double[]){2, 1}, 2, (uint8_t[]){0, 1, 2}, 255, &fault) == LM_DOMAIN);
    CHECK(fault.index == 1 && fault.value == 1);
    CHECK(lm_slicer_init(&s, LM_F32, (double[]){NAN}, 1, (uint8_t[]){0, 1}, 255, NULL) == LM_DOMAIN);
    static const double many[255];
    static const uint8_t codes[256];
    CHECK(lm_slicer_init(&s, LM_F32, many, 255, codes, 255, &fault) == LM_SIZE);

    /* every binary16 next to every other */
    for (uint32_t b = 0; b < 0x10000; b += 1) {
        double level = half_value((uint16_t)b);
        if (isnan(level))
            continue;
        CHECK(lm_slicer_init(&s, LM_F16, &level, 1, (uint8_t[]){0, 1}, 255, NULL) == LM_OK);
        uint16_t x[3] = {(uint16_t)(b - 1), (uint16_t)b, (uint16_t)(b + 1)};
        uint8_t out[3];
        lm_slicer_decide(&s, x, 2, false, 3, out, 1);
        for (int i = 0; i < 3; i++) {
            double value = half_value(x[i]);
            CHECK(out[i] == (isnan(value) ? 255 : value >= level));
        }
        double above = nextafter(level, INFINITY); /* a level just above is not reached by this value */
        CHECK(lm_slicer_init(&s, LM_F16, &above, 1, (uint8_t[]){0, 1}, 255, NULL) == LM_OK);
        lm_slicer_decide(&s, x, 2, false, 3, out, 1);
        for (int i = 0; i < 3; i++)
            CHECK(out[i] == (isnan(half_value(x[i])) ? 255 : half_value(x[i]) >= above));
    }
    return check_report();
}
