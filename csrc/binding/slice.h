/* What the files that slice arrays share: the type of a reading, slicers from Python objects, the walk over arrays. */
#ifndef LM_BINDING_SLICE_H
#define LM_BINDING_SLICE_H

#include "binding.h"

/* The reading type of a NumPy type number; LM_READING_END when there is no kernel for it. */
lm_reading lm_reading_of(int number);

/* The reading type of x; LM_READING_END with a TypeError set when there is no kernel for it. */
lm_reading lm_reading_of_array(PyArrayObject *x);

/* A float64 array of one dimension, and a uint8 one with one entry more: new references, or -1 with an error set. */
int lm_levels_and_codes(PyObject *levels, PyObject *codes, PyArrayObject **levels_out, PyArrayObject **codes_out);

/* A slicer for the readings of x; -1 with an error set. */
int lm_slicer_from(PyArrayObject *x, PyObject *levels, PyObject *codes, int invalid, lm_slicer *slicer);

/* A new reference to `given`, checked to be uint8 of the shape of x, or to a new array like x when it is None. */
PyArrayObject *lm_out_like(PyArrayObject *x, PyObject *given);

/* Work on n elements of up to three arrays at these addresses and strides. Runs without the GIL, on any thread; a
 * failure ends the walk and is reported through lm_raise with the fault that the work left in its context. */
typedef lm_status lm_part(void *context, char *const at[], const npy_intp stride[], npy_intp n);

enum { LM_WALK_MOST = 3 };

/* Walks arrays of one shape side by side: as one run shared by threads where their layouts allow, else run by run.
 * Ctrl-C is seen between parts. 0, or -1 with an error set; *fault names the argument of a failed part. */
int lm_walk(int count, PyArrayObject *const arrays[], const npy_uint32 flags[], lm_part *part, void *context,
            unsigned threads, const lm_fault *fault);

/* The same for one run of n elements at an address; context, threads and result as above. */
int lm_walk_run(int count, char *const at[], const npy_intp stride[], npy_intp n, npy_intp block, lm_part *part,
                void *context, unsigned threads, const lm_fault *fault);

#endif
