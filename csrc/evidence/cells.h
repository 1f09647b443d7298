/* Readings in order: distinct values, how often each occurred, and the lattice that they stand on. */
#ifndef LM_CELLS_H
#define LM_CELLS_H

#include "../limen.h"

typedef struct {
    size_t count;
    double *value; /* ascending */
    double *times; /* how often */
    double total;
    double step; /* of the lattice; 0 where there is none */
} lm_cells;

/* On success *out is the caller's to free. Refuses readings that are not finite or beyond LM_READING_LIMIT. */
LM_MUST_USE lm_status lm_cells_make(const double readings[], size_t n, lm_cells *out, lm_fault *fault);
void lm_cells_free(lm_cells *cells);

/* So that differences and sums of a few readings stay finite. */
#define LM_READING_LIMIT 1e307

#endif
