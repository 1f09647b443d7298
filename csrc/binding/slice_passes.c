/* One pass that decides and does more: packed bits, counts by true state, hysteresis. */
#include "slice.h"

#include <stdatomic.h>
#include <string.h>

#include "../numeric/memory.h"

/* A row of an array along its last axis, for functions that read in order; x has at least one axis. */
typedef struct {
    PyArrayIterObject *of[2];
    npy_intp stride[2], length;
} rows;

static void rows_close(rows *r)
{
    Py_CLEAR(r->of[0]);
    Py_CLEAR(r->of[1]);
}

/* Both arrays have the same shape but for the length of the last axis. */
static int rows_open(rows *r, PyArrayObject *x, PyArrayObject *out)
{
    PyArrayObject *both[2] = {x, out};
    *r = (rows){.length = PyArray_DIM(x, PyArray_NDIM(x) - 1)};
    for (int a = 0; a < 2; a++) {
        int axis = PyArray_NDIM(both[a]) - 1;
        r->stride[a] = PyArray_STRIDE(both[a], axis);
        r->of[a] = (PyArrayIterObject *)PyArray_IterAllButAxis((PyObject *)both[a], &axis);
        if (r->of[a] == NULL) {
            rows_close(r);
            return -1;
        }
    }
    return 0;
}

/* ---- pack ---- */

typedef struct {
    lm_slicer slicer;
    bool swapped, big;
    npy_intp stride;    /* of readings */
    const char *end;    /* of the packed row */
    npy_intp missing;   /* readings that the last byte of the row lacks */
    atomic_size_t lost; /* NaN */
} pack_context;

/* An element of the walk is a byte of bits: eight readings. */
static lm_status pack_part(void *context, char *const at[], const npy_intp stride[], npy_intp bytes)
{
    (void)stride;
    pack_context *c = context;
    npy_intp n = 8 * bytes - (at[1] + bytes == c->end ? c->missing : 0);
    size_t lost = lm_slicer_pack(&c->slicer, at[0], c->stride, c->swapped, (size_t)n, c->big, (uint8_t *)at[1]);
    if (lost > 0)
        atomic_fetch_add(&c->lost, lost);
    return LM_OK;
}

static PyObject *pack(PyObject *module, PyObject *args, PyObject *keywords)
{
    (void)module;
    static char *names[] = {"x", "levels", "codes", "out", "big", "nan_bit", "threads", NULL};
    PyArrayObject *x, *out;
    PyObject *levels, *codes;
    int big = 0, nan_bit = 0;
    unsigned threads = 1;
    if (!PyArg_ParseTupleAndKeywords(args, keywords, "O!OOO!|ppI", names, &PyArray_Type, &x, &levels, &codes,
                                     &PyArray_Type, &out, &big, &nan_bit, &threads))
        return NULL;
    int axes = PyArray_NDIM(x);
    npy_intp bytes = axes > 0 ? (PyArray_DIM(x, axes - 1) + 7) / 8 : 0;
    if (axes < 1 || PyArray_NDIM(out) != axes || PyArray_TYPE(out) != NPY_UINT8 ||
        memcmp(PyArray_DIMS(x), PyArray_DIMS(out), (size_t)(axes - 1) * sizeof(npy_intp)) != 0 ||
        PyArray_DIM(out, axes - 1) != bytes || (bytes > 1 && PyArray_STRIDE(out, axes - 1) != 1)) {
        PyErr_SetString(PyExc_ValueError,
                        "out does not fit: expected contiguous rows of uint8, one byte for each eight "
                        "readings along the last axis");
        return NULL;
    }
    if (PyArray_FailUnlessWriteable(out, "out") < 0)
        return NULL;
    pack_context context = {.swapped = PyArray_ISBYTESWAPPED(x), .big = big};
    if (lm_slicer_from(x, levels, codes, 0x80 | nan_bit, &context.slicer) < 0)
        return NULL;
    rows r;
    int failed = rows_open(&r, x, out);
    context.stride = r.stride[0];
    context.missing = 8 * bytes - r.length;
    while (failed == 0 && PyArray_ITER_NOTDONE(r.of[0])) {
        char *at[2] = {PyArray_ITER_DATA(r.of[0]), PyArray_ITER_DATA(r.of[1])};
        context.end = at[1] + bytes;
        failed =
            lm_walk_run(2, at, (npy_intp[]){8 * context.stride, 1}, bytes, 1 << 16, pack_part, &context, threads, NULL);
        PyArray_ITER_NEXT(r.of[0]);
        PyArray_ITER_NEXT(r.of[1]);
    }
    rows_close(&r);
    return failed < 0 ? NULL : PyLong_FromSize_t(atomic_load(&context.lost));
}

/* ---- tally ---- */

typedef struct {
    lm_slicer slicer;
    bool swapped, has_truth, has_store;
    lm_reading truth_reading;
    uint32_t decisions, states;
    _Atomic uint64_t *counts;
    lm_fault fault;
    atomic_flag faulted;
} tally_context;

static lm_status tally_part(void *context, char *const at[], const npy_intp stride[], npy_intp n)
{
    tally_context *c = context;
    size_t cells = ((size_t)c->decisions + 1) * c->states;
    uint64_t few[64] = {0}, *counts = cells <= LM_LENGTH(few) ? few : lm_allocate_zeroed(cells, sizeof *counts);
    if (counts == NULL)
        return LM_NO_MEMORY;
    int store = c->has_truth ? 2 : 1;
    lm_fault fault = {.argument = NULL};
    lm_status status =
        lm_slicer_tally(&c->slicer, at[0], stride[0], c->swapped, (size_t)n, c->has_truth ? at[1] : NULL,
                        c->has_truth ? stride[1] : 0, c->truth_reading, c->decisions, c->states,
                        c->has_store ? (uint8_t *)at[store] : NULL, c->has_store ? stride[store] : 0, counts, &fault);
    for (size_t i = 0; i < cells && status == LM_OK; i++)
        if (counts[i] > 0)
            atomic_fetch_add_explicit(&c->counts[i], counts[i], memory_order_relaxed);
    if (status != LM_OK && !atomic_flag_test_and_set(&c->faulted))
        c->fault = fault;
    if (counts != few)
        lm_release(counts);
    return status;
}

static PyObject *tally(PyObject *module, PyObject *args, PyObject *keywords)
{
    (void)module;
    static char *names[] = {"x", "levels", "codes", "counts", "truth", "store", "threads", NULL};
    static const npy_uint32 read = NPY_ITER_READONLY, write = NPY_ITER_WRITEONLY;
    PyArrayObject *x, *counts;
    PyObject *levels, *codes, *truth = Py_None, *store = Py_None;
    unsigned threads = 1;
    if (!PyArg_ParseTupleAndKeywords(args, keywords, "O!OOO!|OOI", names, &PyArray_Type, &x, &levels, &codes,
                                     &PyArray_Type, &counts, &truth, &store, &threads))
        return NULL;
    /* counts[decision, state] of int64, a last row for NaN */
    if (PyArray_NDIM(counts) != 2 || PyArray_TYPE(counts) != NPY_INT64 || !PyArray_ISCARRAY(counts) ||
        PyArray_DIM(counts, 0) < 2 || PyArray_DIM(counts, 0) > 256 || PyArray_DIM(counts, 1) < 1 ||
        PyArray_DIM(counts, 1) > 255) {
        PyErr_SetString(PyExc_ValueError,
                        "counts does not fit: expected int64[decisions + 1, states], at most 255 each");
        return NULL;
    }
    tally_context context = {
        .swapped = PyArray_ISBYTESWAPPED(x),
        .has_truth = truth != Py_None,
        .decisions = (uint32_t)PyArray_DIM(counts, 0) - 1,
        .states = (uint32_t)PyArray_DIM(counts, 1),
        .counts = PyArray_DATA(counts),
        .faulted = ATOMIC_FLAG_INIT,
    };
    PyArrayObject *arrays[LM_WALK_MOST] = {x}, *out = NULL;
    npy_uint32 flags[LM_WALK_MOST] = {read};
    int count = 1;
    if (context.has_truth) {
        if (!PyArray_Check(truth) || !PyArray_SAMESHAPE(x, (PyArrayObject *)truth)) {
            PyErr_SetString(PyExc_ValueError, "truth has another shape than x");
            return NULL;
        }
        context.truth_reading = lm_reading_of(PyArray_TYPE((PyArrayObject *)truth));
        if (context.truth_reading > LM_U64 || PyArray_ISBYTESWAPPED((PyArrayObject *)truth)) {
            PyErr_SetString(PyExc_TypeError, "truth is no array of native integers");
            return NULL;
        }
        arrays[count] = (PyArrayObject *)truth;
        flags[count++] = read;
    }
    if (store != Py_None) {
        out = lm_out_like(x, store);
        if (out == NULL)
            return NULL;
        context.has_store = true;
        arrays[count] = out;
        flags[count++] = write;
    }
    int failed = lm_slicer_from(x, levels, codes, (int)context.decisions, &context.slicer);
    for (uint32_t k = 0; failed == 0 && k <= context.slicer.count; k++)
        if (context.slicer.code[k] >= context.decisions) {
            PyErr_Format(PyExc_ValueError, "decisions holds %d; expected numbers below %u", context.slicer.code[k],
                         context.decisions);
            failed = -1;
        }
    if (failed == 0)
        failed = lm_walk(count, arrays, flags, tally_part, &context, threads, &context.fault);
    Py_XDECREF(out);
    if (failed < 0)
        return NULL;
    Py_RETURN_NONE;
}

/* ---- hysteresis ---- */

typedef struct {
    lm_hysteresis hysteresis;
    bool swapped;
    uint8_t *interval;
} hysteresis_context;

static lm_status hysteresis_part(void *context, char *const at[], const npy_intp stride[], npy_intp n)
{
    hysteresis_context *c = context;
    lm_hysteresis_decide(&c->hysteresis, at[0], stride[0], c->swapped, (size_t)n, c->interval, (uint8_t *)at[1],
                         stride[1]);
    return LM_OK;
}

static PyObject *hysteresis(PyObject *module, PyObject *args, PyObject *keywords)
{
    (void)module;
    static char *names[] = {"x", "levels", "widths", "codes", "intervals", "invalid", "out", NULL};
    PyArrayObject *x, *intervals, *levels, *codes, *widths;
    PyObject *levels_object, *widths_object, *codes_object, *out_object = Py_None;
    int invalid = 255;
    if (!PyArg_ParseTupleAndKeywords(args, keywords, "O!OOOO!|iO", names, &PyArray_Type, &x, &levels_object,
                                     &widths_object, &codes_object, &PyArray_Type, &intervals, &invalid, &out_object))
        return NULL;
    int axes = PyArray_NDIM(x);
    npy_intp runs = 1;
    for (int a = 0; a < axes - 1; a++)
        runs *= PyArray_DIM(x, a);
    if (axes < 1 || PyArray_TYPE(intervals) != NPY_UINT8 || !PyArray_ISCARRAY(intervals) ||
        PyArray_SIZE(intervals) != runs) {
        PyErr_SetString(PyExc_ValueError,
                        "intervals does not fit: expected uint8, one for each run along the last axis");
        return NULL;
    }
    lm_reading reading = lm_reading_of_array(x);
    if (reading == LM_READING_END || lm_levels_and_codes(levels_object, codes_object, &levels, &codes) < 0)
        return NULL;
    PyArrayObject *out = NULL;
    hysteresis_context context = {.swapped = PyArray_ISBYTESWAPPED(x), .interval = PyArray_DATA(intervals)};
    widths = (PyArrayObject *)PyArray_FROMANY(widths_object, NPY_DOUBLE, 1, 1, NPY_ARRAY_CARRAY_RO);
    if (widths != NULL && PyArray_SIZE(widths) != PyArray_SIZE(levels)) {
        PyErr_SetString(PyExc_ValueError, "width has not one entry for each level");
        Py_CLEAR(widths);
    }
    int failed = widths == NULL ? -1 : 0;
    if (failed == 0) {
        lm_fault fault = {.argument = NULL};
        lm_status status =
            lm_hysteresis_init(&context.hysteresis, reading, PyArray_DATA(levels), PyArray_DATA(widths),
                               (size_t)PyArray_SIZE(levels), PyArray_DATA(codes), (uint8_t)invalid, &fault);
        if (status != LM_OK) {
            lm_raise(status, &fault);
            failed = -1;
        }
    }
    npy_intp count = failed == 0 ? PyArray_SIZE(levels) : 0;
    for (npy_intp i = 0; failed == 0 && i < runs; i++)
        if (context.interval[i] > count && context.interval[i] != LM_NO_INTERVAL) {
            PyErr_Format(PyExc_ValueError, "start is %d; expected an interval from 0 to %zd", context.interval[i],
                         count);
            failed = -1;
        }
    if (failed == 0)
        out = lm_out_like(x, out_object);
    rows r = {.of = {NULL, NULL}};
    if (out != NULL && rows_open(&r, x, out) < 0)
        Py_CLEAR(out);
    while (out != NULL && PyArray_ITER_NOTDONE(r.of[0])) {
        char *at[2] = {PyArray_ITER_DATA(r.of[0]), PyArray_ITER_DATA(r.of[1])};
        if (lm_walk_run(2, at, r.stride, r.length, 1 << 19, hysteresis_part, &context, 1, NULL) < 0)
            Py_CLEAR(out);
        context.interval++;
        PyArray_ITER_NEXT(r.of[0]);
        PyArray_ITER_NEXT(r.of[1]);
    }
    rows_close(&r);
    Py_XDECREF(widths);
    Py_DECREF(levels);
    Py_DECREF(codes);
    return (PyObject *)out;
}

/* ---- channels ---- */

typedef struct {
    lm_channels *channels;
    npy_intp width;
    const char *end;  /* of the readings */
    npy_intp missing; /* readings that the last run lacks */
} channels_context;

/* An element of the walk is a run of channels. */
static lm_status channels_part(void *context, char *const at[], const npy_intp stride[], npy_intp runs)
{
    const channels_context *c = context;
    npy_intp n = runs * c->width - (at[0] + runs * stride[0] >= c->end ? c->missing : 0);
    lm_channels_decide(c->channels, at[0], (size_t)n, (uint8_t *)at[1]);
    return LM_OK;
}

static PyObject *channels(PyObject *module, PyObject *args, PyObject *keywords)
{
    (void)module;
    static char *names[] = {"x", "levels", "codes", "out", "invalid", "threads", NULL};
    PyArrayObject *x, *levels, *codes, *out;
    int invalid = 255;
    unsigned threads = 1;
    if (!PyArg_ParseTupleAndKeywords(args, keywords, "O!O!O!O!|iI", names, &PyArray_Type, &x, &PyArray_Type, &levels,
                                     &PyArray_Type, &codes, &PyArray_Type, &out, &invalid, &threads))
        return NULL;
    lm_reading reading = lm_reading_of_array(x);
    if (reading == LM_READING_END)
        return NULL;
    bool shared = PyArray_NDIM(codes) == 1;
    npy_intp channels_count = PyArray_NDIM(levels) == 2 ? PyArray_DIM(levels, 0) : 0;
    npy_intp count = channels_count > 0 ? PyArray_DIM(levels, 1) : 0;
    if (channels_count == 0 || PyArray_TYPE(levels) != NPY_DOUBLE || !PyArray_ISCARRAY_RO(levels) ||
        PyArray_TYPE(codes) != NPY_UINT8 || !PyArray_ISCARRAY_RO(codes) ||
        PyArray_SIZE(codes) != (shared ? 1 : channels_count) * (count + 1) || !PyArray_ISCARRAY_RO(x) ||
        PyArray_SIZE(x) % channels_count != 0 || PyArray_TYPE(out) != NPY_UINT8 || !PyArray_ISCARRAY(out) ||
        PyArray_SIZE(out) != PyArray_SIZE(x)) {
        PyErr_SetString(PyExc_ValueError,
                        "the arrays do not fit: expected whole rounds of C-contiguous readings, levels[channel, m], "
                        "decisions[m + 1] or [channel, m + 1], and writable out");
        return NULL;
    }
    channels_context context = {.channels = NULL};
    lm_fault fault = {.argument = NULL};
    lm_status status = lm_channels_new(&context.channels, reading, PyArray_DATA(levels), (size_t)channels_count,
                                       (size_t)count, PyArray_DATA(codes), shared, (uint8_t)invalid, &fault);
    if (status != LM_OK)
        return lm_raise(status, &fault);
    context.width = (npy_intp)lm_channels_width(context.channels);
    npy_intp n = PyArray_SIZE(x), runs = (n + context.width - 1) / context.width, item = PyArray_ITEMSIZE(x);
    context.end = PyArray_BYTES(x) + n * item;
    context.missing = runs * context.width - n;
    npy_intp block = (1 << 19) / context.width + 1;
    int failed = lm_walk_run(2, (char *[]){PyArray_BYTES(x), PyArray_BYTES(out)},
                             (npy_intp[]){context.width * item, context.width}, runs, block, channels_part, &context,
                             threads, NULL);
    lm_channels_free(context.channels);
    if (failed < 0)
        return NULL;
    Py_INCREF(out);
    return (PyObject *)out;
}

static PyMethodDef functions[] = {
    {"pack", (PyCFunction)(void (*)(void))pack, METH_VARARGS | METH_KEYWORDS,
     "pack($module, /, x, levels, codes, out, big=False, nan_bit=0, threads=1)\n--\n\n"
     "Codes 0 and 1 as bits along the last axis; returns the number of NaN. See limen.Rule.pack."},
    {"tally", (PyCFunction)(void (*)(void))tally, METH_VARARGS | METH_KEYWORDS,
     "tally($module, /, x, levels, codes, counts, truth=None, store=None, threads=1)\n--\n\n"
     "Adds decisions by true state to counts, its last row for NaN. See limen.Rule.tally."},
    {"hysteresis", (PyCFunction)(void (*)(void))hysteresis, METH_VARARGS | METH_KEYWORDS,
     "hysteresis($module, /, x, levels, widths, codes, intervals, invalid=255, out=None)\n--\n\n"
     "Codes with hysteresis along the last axis; intervals carries the state. See limen.Rule.with_hysteresis."},
    {"channels", (PyCFunction)(void (*)(void))channels, METH_VARARGS | METH_KEYWORDS,
     "channels($module, /, x, levels, codes, out, invalid=255, threads=1)\n--\n\n"
     "Codes of interleaved channels, each with its own levels. See limen.decide."},
    {NULL, NULL, 0, NULL},
};

int lm_bind_slice_passes(PyObject *module)
{
    return PyModule_AddFunctions(module, functions);
}
