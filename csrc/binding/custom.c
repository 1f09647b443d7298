/* Python callables as densities: what the C library calls back, and the function that makes one.
 *
 * The callback takes the GIL by itself, so that it is safe from any thread. After an exception it answers no more until
 * the exception has reached the caller, so that what it interrupts ends at once.
 */
#include <math.h>

#include "density.h"

static bool refuse(const char *what, PyObject *got)
{
    PyErr_Format(PyExc_TypeError, "logpdf returned %s %R; expected an array of real numbers", what, got);
    return false;
}

/* The numbers of an answer, into out. */
static bool take(PyObject *answer, const double x[], double out[], size_t n)
{
    PyArrayObject *given = (PyArrayObject *)PyArray_FROM_O(answer);
    if (given == NULL)
        return false;
    bool ok = false;
    if (!PyArray_ISINTEGER(given) && !PyArray_ISFLOAT(given) && !PyArray_ISBOOL(given)) {
        refuse(answer == Py_None ? "nothing," : "", answer);
    } else if (PyArray_NDIM(given) != 1 || (size_t)PyArray_DIM(given, 0) != n) {
        PyObject *shape = PyObject_GetAttrString((PyObject *)given, "shape");
        if (shape != NULL)
            PyErr_Format(PyExc_ValueError,
                         "logpdf returned the shape %R for readings of shape (%zu,); expected the "
                         "same shape",
                         shape, n);
        Py_XDECREF(shape);
    } else {
        PyArrayObject *values = (PyArrayObject *)PyArray_FROM_OTF((PyObject *)given, NPY_DOUBLE, NPY_ARRAY_IN_ARRAY);
        ok = values != NULL;
        if (ok)
            memcpy(out, PyArray_DATA(values), n * sizeof *out);
        Py_XDECREF(values);
    }
    Py_DECREF(given);
    for (size_t i = 0; ok && i < n; i++)
        if (isnan(out[i])) {
            PyObject *at = PyFloat_FromDouble(x[i]);
            if (at != NULL)
                PyErr_Format(PyExc_ValueError,
                             "logpdf returned nan at the reading %R; expected a log density, or -inf "
                             "where there is none",
                             at);
            Py_XDECREF(at);
            return false;
        }
    return ok;
}

static bool call(void *context, const double x[], double out[], size_t n)
{
    PyGILState_STATE state = PyGILState_Ensure();
    bool ok = false;
    if (!PyErr_Occurred()) {
        npy_intp shape[1] = {(npy_intp)n};
        PyObject *readings = PyArray_SimpleNew(1, shape, NPY_DOUBLE), *answer = NULL;
        if (readings != NULL) {
            memcpy(PyArray_DATA((PyArrayObject *)readings), x, n * sizeof *x);
            answer = PyObject_CallOneArg(context, readings);
        }
        ok = answer != NULL && take(answer, x, out, n);
        Py_XDECREF(readings);
        Py_XDECREF(answer);
    }
    PyGILState_Release(state);
    return ok;
}

static void forget(void *context)
{
    PyGILState_STATE state = PyGILState_Ensure();
    PyObject *type, *value, *trace; /* what the function's own end may raise or clear is not the caller's */
    PyErr_Fetch(&type, &value, &trace);
    Py_DECREF((PyObject *)context);
    PyErr_Restore(type, value, trace);
    PyGILState_Release(state);
}

/* custom(type, logpdf, low, high, function): the recipe holds logpdf, and function is what is called */
static PyObject *custom(PyObject *module, PyObject *args)
{
    (void)module;
    PyObject *type, *logpdf, *function;
    lm_range support;
    if (!PyArg_ParseTuple(args, "O!OddO:custom", &PyType_Type, &type, &logpdf, &support.low, &support.high, &function))
        return NULL;
    lm_density *density = NULL;
    lm_fault fault = {.index = -1};
    lm_status status = lm_density_custom(call, Py_NewRef(function), forget, support, &density, &fault);
    if (status != LM_OK)
        return lm_raise(status, &fault);
    return lm_density_wrap((PyTypeObject *)type, density,
                           Py_BuildValue("(sOdd)", "custom", logpdf, support.low, support.high));
}

static PyMethodDef functions[] = {
    {"custom", custom, METH_VARARGS,
     "custom($module, type, logpdf, low, high, function, /)\n--\n\nThe law of a Python function."},
    {NULL, NULL, 0, NULL},
};

int lm_bind_custom(PyObject *module)
{
    return PyModule_AddFunctions(module, functions);
}
