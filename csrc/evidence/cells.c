/* Sorting and counting readings, and finding the step of a clock or a converter in them. */
#include "cells.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "../numeric/fault.h"
#include "../numeric/memory.h"

static int ascending(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

/* Whole numbers: the greatest common divisor of their differences, exactly. Numbers too large to tell are left out. */
static double whole_step(const lm_cells *cells)
{
    double step = 0, origin = 0;
    bool started = false;
    for (size_t i = 0; i < cells->count; i++) {
        double value = cells->value[i];
        if (fabs(value) > 0x1p52)
            continue;
        if (value != floor(value))
            return 0;
        if (!started) {
            origin = value;
            started = true;
        }
        for (double a = value - origin; a != 0;) {
            double rest = fmod(step, a);
            step = a;
            a = rest;
        }
    }
    return step;
}

/* Unit in the last place of a reading, in the coarsest type that holds all of them. */
static double unit(const lm_cells *cells)
{
    for (size_t i = 0; i < cells->count; i++)
        if (fabs(cells->value[i]) <= FLT_MAX && (double)(float)cells->value[i] != cells->value[i])
            return DBL_EPSILON;
    return FLT_EPSILON;
}

/* Volts from a converter: the smallest gap is the step when every other gap is a whole multiple of it within the
 * rounding of the readings. Gaps too wide for that rounding to tell are left out; nine in ten must tell. */
static double scaled_step(const lm_cells *cells)
{
    const double *value = cells->value, epsilon = unit(cells);
    double step = INFINITY, step_error = 0;
    for (size_t i = 1; i < cells->count; i++)
        if (value[i] - value[i - 1] < step) {
            step = value[i] - value[i - 1];
            step_error = epsilon * fmax(fabs(value[i]), fabs(value[i - 1]));
        }
    double told = 0, cells_wide = 0, width = 0;
    for (size_t i = 1; i < cells->count; i++) {
        double gap = value[i] - value[i - 1], multiple = round(gap / step);
        double error = epsilon * fmax(fabs(value[i]), fabs(value[i - 1])) + multiple * step_error;
        if (!(error < step / 8))
            continue;
        if (fabs(gap - multiple * step) > error)
            return 0;
        told++;
        cells_wide += multiple;
        width += gap;
    }
    return told >= 0.9 * (double)(cells->count - 1) ? width / cells_wide : 0;
}

lm_status lm_cells_make(const double readings[], size_t n, lm_cells *out, lm_fault *fault)
{
    lm_cells cells = {.value = lm_allocate(n, sizeof(double)), .times = lm_allocate(n, sizeof(double))};
    lm_status status = LM_NO_MEMORY;
    if (cells.value == NULL || cells.times == NULL)
        goto done;
    for (size_t i = 0; i < n; i++) {
        if (!(fabs(readings[i]) <= LM_READING_LIMIT)) {
            status = lm_refuse(fault, LM_DOMAIN, "readings", readings[i], (ptrdiff_t)i,
                               "finite numbers of magnitude 1e307 at most");
            goto done;
        }
        cells.value[i] = readings[i] + 0.0; /* -0 is 0 */
    }
    qsort(cells.value, n, sizeof(double), ascending);
    for (size_t i = 0; i < n; i++)
        if (cells.count > 0 && cells.value[i] == cells.value[cells.count - 1]) {
            cells.times[cells.count - 1]++;
        } else {
            cells.value[cells.count] = cells.value[i];
            cells.times[cells.count++] = 1;
        }
    cells.total = (double)n;
    if (cells.count > 1) {
        cells.step = whole_step(&cells);
        if (cells.step == 0 && cells.count < n) /* without a single tie there is no lattice to speak of */
            cells.step = scaled_step(&cells);
    }
    *out = cells;
    return LM_OK;
done:
    lm_cells_free(&cells);
    return status;
}

void lm_cells_free(lm_cells *cells)
{
    lm_release(cells->value);
    lm_release(cells->times);
}
