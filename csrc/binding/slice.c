/* Levels applied to NumPy arrays: the generalized ufunc `decide`, and `slice`, which knows threads and any layout. */
#include "binding.h"

#include <fenv.h>
#include <string.h>
#include <time.h>

/* ---- the gufunc (),(m),(n)->() ---- */

/* NumPy's types in growing order (it takes the first loop that all inputs cast to safely), and their readings. */
#define BY_SIZE(type, sign) (sizeof(type) == 8 ? LM_##sign##64 : LM_##sign##32)
#define LOOPS(X)                                                                                                       \
    X(NPY_BYTE, LM_I8)                                                                                                 \
    X(NPY_UBYTE, LM_U8)                                                                                                \
    X(NPY_SHORT, LM_I16)                                                                                               \
    X(NPY_USHORT, LM_U16)                                                                                              \
    X(NPY_INT, LM_I32)                                                                                                 \
    X(NPY_UINT, LM_U32)                                                                                                \
    X(NPY_LONG, BY_SIZE(long, I))                                                                                      \
    X(NPY_ULONG, BY_SIZE(long, U))                                                                                     \
    X(NPY_LONGLONG, LM_I64)                                                                                            \
    X(NPY_ULONGLONG, LM_U64)                                                                                           \
    X(NPY_HALF, LM_F16)                                                                                                \
    X(NPY_FLOAT, LM_F32)                                                                                               \
    X(NPY_DOUBLE, LM_F64)

/* The reading type of a NumPy type number; LM_READING_END when there is no kernel for it. */
static lm_reading reading_of(int number)
{
    switch (number) {
#define CASE(type, reading)                                                                                            \
    case type:                                                                                                         \
        return reading;
        LOOPS(CASE)
#undef CASE
    case NPY_BOOL:
        return LM_U8;
    default:
        return LM_READING_END;
    }
}

static void raise_in_loop(lm_status status, const lm_fault *fault)
{
    NPY_ALLOW_C_API_DEF
    NPY_ALLOW_C_API
    lm_raise(status, fault);
    NPY_DISABLE_C_API
}

/* Gathers what has a stride; count fits the arrays of the caller. */
static void collect(const char *from, npy_intp stride, npy_intp count, size_t size, void *to)
{
    for (npy_intp i = 0; i < count; i++)
        memcpy((char *)to + (size_t)i * size, from + i * stride, size);
}

static void decide_loop(char **args, npy_intp const *dimensions, npy_intp const *steps, void *data)
{
    const char *x = args[0], *levels = args[1], *codes = args[2];
    char *out = args[3];
    npy_intp n = dimensions[0], count = dimensions[1];
    lm_fault fault = {.argument = NULL};
    if (dimensions[2] != count + 1) {
        fault = (lm_fault){"the number of decisions", "one more than the number of levels", (double)dimensions[2], -1};
        raise_in_loop(LM_SIZE, &fault);
        return;
    }
    if (count > LM_MAX_LEVELS) {
        fault = (lm_fault){"the number of levels", "at most 254", (double)count, -1};
        raise_in_loop(LM_SIZE, &fault);
        return;
    }
    /* one set of levels for all readings of the loop, or one each */
    npy_intp together = steps[1] == 0 && steps[2] == 0 ? n : 1;
    for (npy_intp i = 0; i < n; i += together) {
        double level[LM_MAX_LEVELS];
        uint8_t code[LM_MAX_LEVELS + 1];
        lm_slicer slicer;
        collect(levels + i * steps[1], steps[4], count, sizeof(double), level);
        collect(codes + i * steps[2], steps[5], count + 1, 1, code);
        lm_status status = lm_slicer_init(&slicer, (lm_reading)(intptr_t)data, level, (size_t)count, code, 255, &fault);
        if (status != LM_OK) {
            raise_in_loop(status, &fault);
            return;
        }
        lm_slicer_decide(&slicer, x + i * steps[0], steps[0], false, (size_t)together, (uint8_t *)out + i * steps[3],
                         steps[3]);
    }
    feclearexcept(FE_INVALID); /* compares with NaN raise it, and NumPy would warn */
}

static int add_decide(PyObject *module)
{
    /* NumPy keeps these arrays for the life of the ufunc, and never writes to them */
    static PyUFuncGenericFunction loops[] = {
#define LOOP(type, reading) decide_loop,
        LOOPS(LOOP)};
    static void *const readings[] = {
#define READING(type, reading) (void *)(intptr_t)(reading),
        LOOPS(READING)};
    static const char types[] = {
#define TYPES(type, reading) type, NPY_DOUBLE, NPY_UINT8, NPY_UINT8,
        LOOPS(TYPES)};
    PyObject *decide = PyUFunc_FromFuncAndDataAndSignature(
        loops, readings, types, LM_LENGTH(loops), 3, 1, PyUFunc_None, "decide",
        "The code of each reading, between ascending levels; 255 for NaN. See limen.decide.", 0, "(),(m),(n)->()");
    int failed = decide == NULL || PyModule_AddObjectRef(module, "decide", decide) < 0;
    Py_XDECREF(decide);
    return failed ? -1 : 0;
}

/* ---- arrays of any layout, with threads ---- */

/* Between blocks the calling thread takes the GIL back, at most twenty times a second, to see whether Ctrl-C was hit.
 */
typedef struct {
    PyThreadState *saved;
    struct timespec asked;
} interrupt;

static bool interrupted(interrupt *state)
{
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    double since = (double)(now.tv_sec - state->asked.tv_sec) + 1e-9 * (double)(now.tv_nsec - state->asked.tv_nsec);
    if (since < 0.05)
        return false;
    state->asked = now;
    PyEval_RestoreThread(state->saved);
    bool stop = PyErr_CheckSignals() < 0;
    state->saved = PyEval_SaveThread();
    return stop;
}

enum { BLOCK = 1 << 19 }; /* readings: a fraction of a millisecond of work, far above the cost of handing it out */

/* Readings and codes as one run of strides each. */
typedef struct {
    interrupt interrupt; /* first, so that the stop callback finds it */
    const lm_slicer *slicer;
    const char *x;
    char *out;
    npy_intp x_stride, out_stride, n;
    bool swapped;
} decide_run;

static void decide_block(void *context, size_t block)
{
    const decide_run *run = context;
    npy_intp from = (npy_intp)block * BLOCK;
    npy_intp n = run->n - from < BLOCK ? run->n - from : BLOCK;
    lm_slicer_decide(run->slicer, run->x + from * run->x_stride, run->x_stride, run->swapped, (size_t)n,
                     (uint8_t *)run->out + from * run->out_stride, run->out_stride);
}

static bool decide_stop(void *context)
{
    return interrupted(context);
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

static int decide_runs(PyArrayObject *x, PyArrayObject *out, decide_run *run, unsigned threads)
{
    lm_status status;
    for (int fortran = 0; fortran < 2; fortran++)
        if (as_run(x, fortran, &run->x_stride) && as_run(out, fortran, &run->out_stride)) {
            run->x = PyArray_BYTES(x);
            run->out = PyArray_BYTES(out);
            run->n = PyArray_SIZE(x);
            run->interrupt.saved = PyEval_SaveThread();
            status = lm_run_blocks((size_t)((run->n + BLOCK - 1) / BLOCK), threads, decide_block, decide_stop, run);
            PyEval_RestoreThread(run->interrupt.saved);
            return status == LM_OK ? 0 : -1; /* it fails only when the signal handler has raised */
        }

    PyArrayObject *operands[2] = {x, out};
    npy_uint32 flags[2] = {NPY_ITER_READONLY, NPY_ITER_WRITEONLY};
    NpyIter *iter = NpyIter_MultiNew(2, operands, NPY_ITER_EXTERNAL_LOOP | NPY_ITER_ZEROSIZE_OK, NPY_KEEPORDER,
                                     NPY_NO_CASTING, flags, NULL);
    if (iter == NULL)
        return -1;
    NpyIter_IterNextFunc *next = NpyIter_GetIterNext(iter, NULL);
    if (next == NULL) {
        NpyIter_Deallocate(iter);
        return -1;
    }
    char **at = NpyIter_GetDataPtrArray(iter);
    npy_intp *strides = NpyIter_GetInnerStrideArray(iter), *inner = NpyIter_GetInnerLoopSizePtr(iter);
    bool stop = false;
    run->interrupt.saved = PyEval_SaveThread();
    do {
        run->x = at[0];
        run->out = at[1];
        run->x_stride = strides[0];
        run->out_stride = strides[1];
        run->n = *inner;
        for (npy_intp block = 0; block * BLOCK < run->n && !stop; block++) {
            decide_block(run, (size_t)block);
            stop = interrupted(&run->interrupt);
        }
    } while (!stop && next(iter));
    PyEval_RestoreThread(run->interrupt.saved);
    return NpyIter_Deallocate(iter) == NPY_SUCCEED && !stop ? 0 : -1;
}

/* Levels and codes from Python objects into a slicer for the readings of x; -1 with an error set. */
static int slicer_from(PyArrayObject *x, PyObject *levels_object, PyObject *codes_object, int invalid,
                       lm_slicer *slicer)
{
    lm_reading reading = reading_of(PyArray_TYPE(x));
    if (reading == LM_READING_END) {
        PyErr_Format(PyExc_TypeError, "x holds %S; expected real numbers of at most 64 bits",
                     (PyObject *)PyArray_DESCR(x));
        return -1;
    }
    int result = -1;
    PyArrayObject *levels = (PyArrayObject *)PyArray_FROMANY(levels_object, NPY_DOUBLE, 1, 1, NPY_ARRAY_CARRAY_RO);
    PyArrayObject *codes = (PyArrayObject *)PyArray_FROMANY(codes_object, NPY_UINT8, 1, 1, NPY_ARRAY_CARRAY_RO);
    if (levels != NULL && codes != NULL) {
        lm_fault fault = {.argument = NULL};
        lm_status status;
        if (PyArray_SIZE(codes) != PyArray_SIZE(levels) + 1) {
            fault = (lm_fault){"the number of decisions", "one more than the number of levels",
                               (double)PyArray_SIZE(codes), -1};
            status = LM_SIZE;
        } else {
            status = lm_slicer_init(slicer, reading, PyArray_DATA(levels), (size_t)PyArray_SIZE(levels),
                                    PyArray_DATA(codes), (uint8_t)invalid, &fault);
        }
        if (status == LM_OK)
            result = 0;
        else
            lm_raise(status, &fault);
    }
    Py_XDECREF(levels);
    Py_XDECREF(codes);
    return result;
}

/* A new reference to `given`, checked, or to a new array like x when it is None. */
static PyArrayObject *out_like(PyArrayObject *x, PyObject *given)
{
    if (given == Py_None)
        return (PyArrayObject *)PyArray_NewLikeArray(x, NPY_KEEPORDER, PyArray_DescrFromType(NPY_UINT8), 0);
    if (!PyArray_Check(given)) {
        PyErr_Format(PyExc_TypeError, "out is a %s; expected a NumPy array", Py_TYPE(given)->tp_name);
        return NULL;
    }
    PyArrayObject *out = (PyArrayObject *)given;
    if (PyArray_TYPE(out) != NPY_UINT8) {
        PyErr_Format(PyExc_TypeError, "out holds %S; expected uint8", (PyObject *)PyArray_DESCR(out));
        return NULL;
    }
    if (!PyArray_SAMESHAPE(x, out)) {
        PyErr_SetString(PyExc_ValueError, "out has another shape than x");
        return NULL;
    }
    if (PyArray_FailUnlessWriteable(out, "out") < 0)
        return NULL;
    Py_INCREF(given);
    return out;
}

static PyObject *slice(PyObject *module, PyObject *args, PyObject *keywords)
{
    (void)module;
    static char *names[] = {"x", "levels", "codes", "invalid", "out", "threads", NULL};
    PyArrayObject *x;
    PyObject *levels, *codes, *out_object = Py_None;
    int invalid = 255, threads = 1;
    if (!PyArg_ParseTupleAndKeywords(args, keywords, "O!OO|iOi", names, &PyArray_Type, &x, &levels, &codes, &invalid,
                                     &out_object, &threads))
        return NULL;
    lm_slicer slicer;
    if (slicer_from(x, levels, codes, invalid, &slicer) < 0)
        return NULL;
    PyArrayObject *out = out_like(x, out_object);
    if (out == NULL)
        return NULL;
    decide_run run = {.slicer = &slicer, .swapped = PyArray_ISBYTESWAPPED(x)};
    clock_gettime(CLOCK_MONOTONIC, &run.interrupt.asked);
    int failed = decide_runs(x, out, &run, threads < 1 ? 1 : (unsigned)threads);
    feclearexcept(FE_INVALID);
    if (failed < 0)
        Py_CLEAR(out);
    return (PyObject *)out;
}

static PyObject *threads_available(PyObject *module, PyObject *unused)
{
    (void)module;
    (void)unused;
    return PyLong_FromUnsignedLong(lm_threads_available());
}

/* (name of the kernels that run, names of the usable ones) */
static PyObject *kernels(PyObject *module, PyObject *unused)
{
    (void)module;
    (void)unused;
    PyObject *usable = PyList_New(0);
    const char *name;
    for (size_t i = 0; usable != NULL && (name = lm_kernels_name(i)) != NULL; i++) {
        PyObject *text = PyUnicode_FromString(name);
        if (text == NULL || PyList_Append(usable, text) < 0)
            Py_CLEAR(usable);
        Py_XDECREF(text);
    }
    return usable == NULL ? NULL : Py_BuildValue("(sN)", lm_kernels_chosen(), usable);
}

static PyMethodDef functions[] = {
    {"slice", (PyCFunction)(void (*)(void))slice, METH_VARARGS | METH_KEYWORDS,
     "slice($module, /, x, levels, codes, invalid=255, out=None, threads=1)\n--\n\n"
     "The code of each reading of an array. See limen.decide."},
    {"threads_available", threads_available, METH_NOARGS,
     "threads_available($module, /)\n--\n\nProcessors this process may use: affinity and control-group quota."},
    {"kernels", kernels, METH_NOARGS, "kernels($module, /)\n--\n\nThe kernels that run, and the usable ones."},
    {NULL, NULL, 0, NULL},
};

/* LIMEN_CPU forces a set of kernels; the import fails when this processor cannot run it. */
static int choose_kernels(void)
{
    const char *name = getenv("LIMEN_CPU");
    if (name == NULL || name[0] == '\0' || lm_kernels_choose(name) == LM_OK)
        return 0;
    PyObject *usable = PyUnicode_FromString(lm_kernels_name(0));
    for (size_t i = 1; usable != NULL && lm_kernels_name(i) != NULL; i++)
        Py_SETREF(usable, PyUnicode_FromFormat("%U, %s", usable, lm_kernels_name(i)));
    if (usable != NULL)
        PyErr_Format(PyExc_ImportError, "LIMEN_CPU is '%s'; this processor runs %U", name, usable);
    Py_XDECREF(usable);
    return -1;
}

int lm_bind_slice(PyObject *module)
{
    return choose_kernels() < 0 || add_decide(module) < 0 ? -1 : PyModule_AddFunctions(module, functions);
}
