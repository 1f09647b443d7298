/* Levels applied to NumPy arrays: the generalized ufunc `decide`, and `slice`, which knows threads and any layout. */
#include "slice.h"

#include <fenv.h>
#include <string.h>

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

lm_reading lm_reading_of(int number)
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

lm_reading lm_reading_of_array(PyArrayObject *x)
{
    lm_reading reading = lm_reading_of(PyArray_TYPE(x));
    if (reading == LM_READING_END)
        PyErr_Format(PyExc_TypeError, "x holds %S; expected real numbers of at most 64 bits",
                     (PyObject *)PyArray_DESCR(x));
    return reading;
}

int lm_levels_and_codes(PyObject *levels, PyObject *codes, PyArrayObject **levels_out, PyArrayObject **codes_out)
{
    *codes_out = NULL;
    *levels_out = (PyArrayObject *)PyArray_FROMANY(levels, NPY_DOUBLE, 1, 1, NPY_ARRAY_CARRAY_RO);
    if (*levels_out != NULL)
        *codes_out = (PyArrayObject *)PyArray_FROMANY(codes, NPY_UINT8, 1, 1, NPY_ARRAY_CARRAY_RO);
    if (*codes_out != NULL && PyArray_SIZE(*codes_out) != PyArray_SIZE(*levels_out) + 1) {
        lm_fault fault = {"the number of decisions", "one more than the number of levels",
                          (double)PyArray_SIZE(*codes_out), -1};
        lm_raise(LM_SIZE, &fault);
        Py_CLEAR(*codes_out);
    }
    if (*codes_out == NULL)
        Py_CLEAR(*levels_out);
    return *codes_out == NULL ? -1 : 0;
}

int lm_slicer_from(PyArrayObject *x, PyObject *levels_object, PyObject *codes_object, int invalid, lm_slicer *slicer)
{
    PyArrayObject *levels, *codes;
    lm_reading reading = lm_reading_of_array(x);
    if (reading == LM_READING_END || lm_levels_and_codes(levels_object, codes_object, &levels, &codes) < 0)
        return -1;
    lm_fault fault = {.argument = NULL};
    lm_status status = lm_slicer_init(slicer, reading, PyArray_DATA(levels), (size_t)PyArray_SIZE(levels),
                                      PyArray_DATA(codes), (uint8_t)invalid, &fault);
    if (status != LM_OK)
        lm_raise(status, &fault);
    Py_DECREF(levels);
    Py_DECREF(codes);
    return status == LM_OK ? 0 : -1;
}

PyArrayObject *lm_out_like(PyArrayObject *x, PyObject *given)
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

typedef struct {
    lm_slicer slicer;
    bool swapped;
} decide_context;

static lm_status decide_part(void *context, char *const at[], const npy_intp stride[], npy_intp n)
{
    const decide_context *c = context;
    lm_slicer_decide(&c->slicer, at[0], stride[0], c->swapped, (size_t)n, (uint8_t *)at[1], stride[1]);
    return LM_OK;
}

static PyObject *slice(PyObject *module, PyObject *args, PyObject *keywords)
{
    (void)module;
    static char *names[] = {"x", "levels", "codes", "invalid", "out", "threads", NULL};
    static const npy_uint32 flags[] = {NPY_ITER_READONLY, NPY_ITER_WRITEONLY};
    PyArrayObject *x;
    PyObject *levels, *codes, *out_object = Py_None;
    int invalid = 255;
    unsigned threads = 1;
    if (!PyArg_ParseTupleAndKeywords(args, keywords, "O!OO|iOI", names, &PyArray_Type, &x, &levels, &codes, &invalid,
                                     &out_object, &threads))
        return NULL;
    decide_context context = {.swapped = PyArray_ISBYTESWAPPED(x)};
    if (lm_slicer_from(x, levels, codes, invalid, &context.slicer) < 0)
        return NULL;
    PyArrayObject *out = lm_out_like(x, out_object);
    if (out != NULL && lm_walk(2, (PyArrayObject *[]){x, out}, flags, decide_part, &context, threads, NULL) < 0)
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
