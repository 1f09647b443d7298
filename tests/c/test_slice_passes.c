/* What else one pass does: bits, counts, hysteresis, channels, threads; readings that end at a page nobody may touch.
 */
#define _GNU_SOURCE
#include <stdatomic.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <unistd.h>

#include "check.h"
#include "limen.h"
#include "numeric/memory.h"

static uint64_t seed = 0x9e3779b97f4a7c15u;

static uint64_t draw(void)
{
    seed ^= seed >> 12;
    seed ^= seed << 25;
    seed ^= seed >> 27;
    return seed * 0x2545f4914f6cdd1du;
}

static double uniform(void)
{
    return (double)(draw() >> 11) * 0x1p-53;
}

enum { N = 5000 };

static float x[N];
static uint8_t code[N], truth[N];
static const double level[3] = {0.2, 0.5, 0.7};

static void fill(void)
{
    for (size_t i = 0; i < N; i++) {
        x[i] = i % 97 == 0 ? NAN : (float)uniform();
        truth[i] = (uint8_t)(draw() % 3);
    }
}

static lm_slicer slicer(const uint8_t codes[4], uint8_t invalid)
{
    lm_slicer s;
    CHECK(lm_slicer_init(&s, LM_F32, level, 3, codes, invalid, NULL) == LM_OK);
    lm_slicer_decide(&s, x, sizeof *x, false, N, code, 1);
    return s;
}

static void check_pack(void)
{
    static uint8_t bits[N / 8 + 2];
    for (size_t n = 0; n < N; n += 1 + n / 3)
        for (int big = 0; big < 2; big++) {
            lm_slicer s = slicer((uint8_t[]){0, 1, 1, 0}, 0x81);
            memset(bits, 0xa5, sizeof bits);
            size_t lost = lm_slicer_pack(&s, x, sizeof *x, false, n, big, bits), wanted = 0, wrong = 0;
            for (size_t i = 0; i < n; i++) {
                wrong += (bits[i / 8] >> (big ? 7 - i % 8 : i % 8) & 1) != (code[i] & 1);
                wanted += code[i] >> 7;
            }
            for (size_t i = n; i < (n + 7) / 8 * 8; i++)
                wrong += bits[i / 8] >> (big ? 7 - i % 8 : i % 8) & 1;
            CHECK(wrong == 0 && lost == wanted && bits[(n + 7) / 8] == 0xa5);
        }
}

static void check_tally(void)
{
    for (uint32_t states = 1; states <= 200; states += states < 4 ? 1 : 60) {
        uint64_t *counts = lm_allocate_zeroed(5 * states, sizeof *counts);
        uint8_t store[N];
        lm_slicer s = slicer((uint8_t[]){3, 1, 0, 2}, 4);
        for (size_t i = 0; i < N; i++)
            truth[i] = (uint8_t)(draw() % states);
        CHECK(lm_slicer_tally(&s, x, sizeof *x, false, N, truth, 1, LM_U8, 4, states, store, 1, counts, NULL) == LM_OK);
        for (size_t i = 0; i < N; i++) {
            counts[code[i] * states + truth[i]]--;
            CHECK(store[i] == (code[i] == 4 ? 255 : code[i]));
        }
        for (size_t c = 0; c < 5 * states; c++)
            CHECK(counts[c] == 0);
        lm_fault fault;
        truth[N - 3] = (uint8_t)states;
        CHECK(lm_slicer_tally(&s, x, sizeof *x, false, N, truth, 1, LM_U8, 4, states, NULL, 0, counts, &fault) ==
              LM_DOMAIN);
        CHECK(fault.value == states);
        for (size_t c = 0; c < 5 * states; c++)
            CHECK(counts[c] == 0);
        truth[N - 3] = 0;
        lm_memory_fail_at(1);
        CHECK(lm_slicer_tally(&s, x, sizeof *x, false, N, truth, 1, LM_U8, 4, states, NULL, 0, counts, NULL) ==
              LM_NO_MEMORY);
        lm_memory_fail_at(0);
        lm_release(counts);
    }
}

static void check_hysteresis(void)
{
    lm_hysteresis h;
    const double width[3] = {0.1, 0.2, 0.1};
    const uint8_t codes[4] = {7, 8, 9, 10};
    CHECK(lm_hysteresis_init(&h, LM_F32, level, width, 3, codes, 255, NULL) == LM_OK);
    uint8_t whole[N], parts[N], end = LM_NO_INTERVAL, state = LM_NO_INTERVAL;
    lm_hysteresis_decide(&h, x, sizeof *x, false, N, &end, whole, 1);
    for (size_t done = 0; done < N;) {
        size_t now = draw() % 700;
        now = now < N - done ? now : N - done;
        lm_hysteresis_decide(&h, x + done, sizeof *x, false, now, &state, parts + done, 1);
        done += now;
    }
    CHECK(memcmp(whole, parts, N) == 0 && state == end);
    unsigned in = LM_NO_INTERVAL;
    for (size_t i = 0; i < N; i++) {
        const double v = (double)x[i];
        if (isnan(v)) {
            CHECK(whole[i] == 255);
            continue;
        }
        if (in == LM_NO_INTERVAL)
            in = (unsigned)(v >= level[0]) + (v >= level[1]) + (v >= level[2]);
        while (in < 3 && v >= level[in] + width[in] / 2)
            in++;
        while (in > 0 && v < level[in - 1] - width[in - 1] / 2)
            in--;
        CHECK(whole[i] == codes[in]);
    }
    lm_fault fault;
    CHECK(lm_hysteresis_init(&h, LM_F32, level, (double[]){0.1, -1, 0.1}, 3, codes, 255, &fault) == LM_DOMAIN);
    CHECK(fault.index == 1);
    CHECK(lm_hysteresis_init(&h, LM_F32, level, (double[]){0.1, 0.1, 9}, 3, codes, 255, &fault) == LM_DOMAIN);
}

static void check_channels(void)
{
    enum { CHANNELS = 7, LEVELS = 2 };
    double own[CHANNELS * LEVELS];
    uint8_t out[N], codes[CHANNELS * (LEVELS + 1)];
    for (size_t c = 0; c < CHANNELS; c++) {
        own[LEVELS * c] = 0.5 * uniform();
        own[LEVELS * c + 1] = 0.5 + 0.5 * uniform();
        for (size_t k = 0; k <= LEVELS; k++)
            codes[(LEVELS + 1) * c + k] = (uint8_t)(draw() % 200);
    }
    for (int shared = 0; shared < 2; shared++) {
        lm_channels *channels = NULL;
        const size_t before = lm_memory_live();
        lm_status status = LM_NO_MEMORY;
        for (size_t nth = 1; status != LM_OK; nth++) {
            lm_memory_fail_at(nth);
            status = lm_channels_new(&channels, LM_F32, own, CHANNELS, LEVELS, codes, shared, 255, NULL);
            CHECK(status == LM_OK || (status == LM_NO_MEMORY && lm_memory_live() == before && channels == NULL));
        }
        lm_memory_fail_at(0);
        CHECK(lm_channels_width(channels) % CHANNELS == 0);
        lm_channels_decide(channels, x, N, out);
        for (size_t i = 0; i < N; i++) {
            const size_t c = i % CHANNELS;
            const size_t k = (size_t)((double)x[i] >= own[LEVELS * c]) + ((double)x[i] >= own[LEVELS * c + 1]);
            CHECK(out[i] == (isnan(x[i]) ? 255 : codes[(shared ? 0 : (LEVELS + 1) * c) + k]));
        }
        lm_channels_free(channels);
        CHECK(lm_memory_live() == before);
    }
    lm_channels *none;
    lm_fault fault;
    own[3] = -1;
    CHECK(lm_channels_new(&none, LM_F32, own, CHANNELS, LEVELS, codes, true, 255, &fault) == LM_DOMAIN);
    CHECK(none == NULL && fault.index == 3);
    CHECK(lm_channels_new(&none, LM_F32, own, 0, LEVELS, codes, true, 255, NULL) == LM_SIZE);
    lm_channels_free(NULL);
}

/* Reads of a kernel past the end of its readings, or writes past its codes, would fault. */
static void check_guard_page(void)
{
    const size_t page = (size_t)sysconf(_SC_PAGESIZE);
    char *readings = mmap(NULL, 3 * page, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS, -1, 0);
    char *codes = mmap(NULL, 2 * page, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS, -1, 0);
    CHECK(readings != MAP_FAILED && codes != MAP_FAILED);
    CHECK(mprotect(readings + 2 * page, page, PROT_NONE) == 0 && mprotect(codes + page, page, PROT_NONE) == 0);
    for (int reading = 0; reading < LM_READING_END; reading++)
        for (size_t count = 0; count <= 40; count += 1 + count)
            for (size_t n = 0; n < 200; n++) {
                double levels[40];
                uint8_t labels[41] = {0};
                for (size_t j = 0; j < count; j++)
                    levels[j] = (double)j;
                const size_t size = lm_reading_size((lm_reading)reading);
                lm_slicer s;
                CHECK(lm_slicer_init(&s, (lm_reading)reading, levels, count, labels, 255, NULL) == LM_OK);
                const char *from = readings + 2 * page - n * size;
                lm_slicer_decide(&s, from, (ptrdiff_t)size, false, n, (uint8_t *)codes + page - n, 1);
                lm_slicer_pack(&s, from, (ptrdiff_t)size, false, n, false, (uint8_t *)codes + page - (n + 7) / 8);
                lm_channels *c;
                CHECK(lm_channels_new(&c, (lm_reading)reading, levels, 1, count, labels, true, 255, NULL) == LM_OK);
                lm_channels_decide(c, from, n, (uint8_t *)codes + page - n);
                lm_channels_free(c);
            }
    munmap(readings, 3 * page);
    munmap(codes, 2 * page);
}

typedef struct {
    atomic_uint done[100];
    unsigned asked;
} job;

static void mark(void *context, size_t block)
{
    atomic_fetch_add(&((job *)context)->done[block], 1);
}

static bool never(void *context)
{
    ((job *)context)->asked++;
    return false;
}

static bool at_third(void *context)
{
    return ++((job *)context)->asked == 3;
}

static void check_threads(void)
{
    for (unsigned threads = 0; threads < 6; threads++) {
        job j = {.asked = 0};
        CHECK(lm_run_blocks(100, threads, mark, never, &j) == LM_OK && j.asked > 0);
        for (size_t b = 0; b < 100; b++)
            CHECK(j.done[b] == 1);
        job stopped = {.asked = 0};
        CHECK(lm_run_blocks(100, threads, mark, at_third, &stopped) == (stopped.asked < 3 ? LM_OK : LM_CALLBACK));
        CHECK(lm_run_blocks(0, threads, mark, NULL, &stopped) == LM_OK);
    }
    CHECK(lm_threads_available() >= 1);
}

int main(void)
{
    const char *name = getenv("LIMEN_CPU");
    if (name != NULL && name[0] != '\0')
        CHECK(lm_kernels_choose(name) == LM_OK);
    fill();
    check_pack();
    check_tally();
    check_hysteresis();
    check_channels();
    check_guard_page();
    check_threads();
    CHECK(lm_memory_live() == 0);
    return check_report();
}
