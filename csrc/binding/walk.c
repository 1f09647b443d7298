/* The walk over arrays of any layout: parts of a run, threads, the GIL, and Ctrl-C. */
#include "slice.h"

#include <fenv.h>
#include <stdatomic.h>
#include <time.h>

enum { BLOCK = 1 << 19 }; /* elements: a fraction of a millisecond of work, far above the cost of handing it out */

typedef struct {
    lm_part *part;
    void *context;
    int count;
    char *const *at;
    const npy_intp *stride;
    npy_intp n, block;
    atomic_int status; /* of the first part that failed */
    PyThreadState *saved;
    struct timespec asked;
} walk;

static void work(void *argument, size_t index)
{
    walk *w = argument;
    if (atomic_load(&w->status) != LM_OK)
        return;
    char *at[LM_WALK_MOST];
    npy_intp from = (npy_intp)index * w->block;
    for (int a = 0; a < w->count; a++)
        at[a] = w->at[a] + from * w->stride[a];
    lm_status status = w->part(w->context, at, w->stride, w->n - from < w->block ? w->n - from : w->block);
    int fine = LM_OK;
    if (status != LM_OK)
        atomic_compare_exchange_strong(&w->status, &fine, (int)status);
}

/* The calling thread takes the GIL back at most twenty times a second, to see whether Ctrl-C was hit. */
static bool stop(void *argument)
{
    walk *w = argument;
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    if ((double)(now.tv_sec - w->asked.tv_sec) + 1e-9 * (double)(now.tv_nsec - w->asked.tv_nsec) < 0.05)
        return atomic_load(&w->status) != LM_OK;
    w->asked = now;
    PyEval_RestoreThread(w->saved);
    bool interrupted = PyErr_CheckSignals() < 0;
    w->saved = PyEval_SaveThread();
    return interrupted || atomic_load(&w->status) != LM_OK;
}

/* Reports how a walk ended; the GIL is held. Compares with NaN leave the invalid flag, and NumPy would warn of it. */
static int finish(walk *w, lm_status status, const lm_fault *fault)
{
    feclearexcept(FE_INVALID);
    lm_status failed = (lm_status)atomic_load(&w->status);
    if (failed != LM_OK)
        lm_raise(failed, fault);
    return failed == LM_OK && status == LM_OK ? 0 : -1; /* else the signal handler has raised */
}

int lm_walk_run(int count, char *const at[], const npy_intp stride[], npy_intp n, npy_intp block, lm_part *part,
                void *context, unsigned threads, const lm_fault *fault)
{
    walk w = {.part = part, .context = context, .count = count, .at = at, .stride = stride, .n = n, .block = block};
    clock_gettime(CLOCK_MONOTONIC, &w.asked);
    w.saved = PyEval_SaveThread();
    lm_status status = lm_run_blocks((size_t)((n + block - 1) / block), threads, work, stop, &w);
    PyEval_RestoreThread(w.saved);
    return finish(&w, status, fault);
}

/* The stride of an array read as one run in memory order; false when it is no such run. */
static bool as_run(PyArrayObject *array, bool fortran, npy_intp *stride)
{
    *stride = PyArray_ITEMSIZE(array);
    if (fortran ? PyArray_IS_F_CONTIGUOUS(array) : PyArray_IS_C_CONTIGUOUS(array))
        return true;
    if (PyArray_NDIM(array) != 1)
        return false;
    *stride = PyArray_STRIDE(array, 0);
    return true;
}

int lm_walk(int count, PyArrayObject *const arrays[], const npy_uint32 flags[], lm_part *part, void *context,
            unsigned threads, const lm_fault *fault)
{
    char *at[LM_WALK_MOST];
    npy_intp stride[LM_WALK_MOST];
    for (int fortran = 0; fortran < 2; fortran++) {
        bool runs = true;
        for (int a = 0; a < count; a++) {
            runs = runs && as_run(arrays[a], fortran, &stride[a]);
            at[a] = PyArray_BYTES(arrays[a]);
        }
        if (runs)
            return lm_walk_run(count, at, stride, PyArray_SIZE(arrays[0]), BLOCK, part, context, threads, fault);
    }

    PyArrayObject *operands[LM_WALK_MOST];
    npy_uint32 operand_flags[LM_WALK_MOST];
    for (int a = 0; a < count; a++) {
        operands[a] = arrays[a];
        operand_flags[a] = flags[a];
    }
    NpyIter *iter = NpyIter_MultiNew(count, operands, NPY_ITER_EXTERNAL_LOOP | NPY_ITER_ZEROSIZE_OK, NPY_KEEPORDER,
                                     NPY_NO_CASTING, operand_flags, NULL);
    NpyIter_IterNextFunc *next = iter != NULL ? NpyIter_GetIterNext(iter, NULL) : NULL;
    if (next == NULL) {
        if (iter != NULL)
            NpyIter_Deallocate(iter);
        return -1;
    }
    npy_intp *inner = NpyIter_GetInnerLoopSizePtr(iter);
    walk w = {.part = part, .context = context, .count = count, .block = BLOCK};
    w.at = NpyIter_GetDataPtrArray(iter);
    w.stride = NpyIter_GetInnerStrideArray(iter);
    clock_gettime(CLOCK_MONOTONIC, &w.asked);
    bool stopped = false;
    w.saved = PyEval_SaveThread();
    do {
        w.n = *inner;
        for (npy_intp block = 0; block * BLOCK < w.n && !stopped; block++) {
            work(&w, (size_t)block);
            stopped = stop(&w);
        }
    } while (!stopped && next(iter));
    PyEval_RestoreThread(w.saved);
    int closed = NpyIter_Deallocate(iter) == NPY_SUCCEED ? 0 : -1;
    return finish(&w, stopped ? LM_CALLBACK : LM_OK, fault) < 0 ? -1 : closed;
}
