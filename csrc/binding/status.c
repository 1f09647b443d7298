/* How a failed status becomes a Python exception, and the list of statuses for the tests. */
#include "binding.h"

#include <math.h>

static PyObject *exception_of(lm_status status)
{
    switch (lm_status_kind(status)) {
    case LM_KIND_ARGUMENT:
        return PyExc_ValueError;
    case LM_KIND_MEMORY:
        return PyExc_MemoryError;
    default:
        return PyExc_RuntimeError;
    }
}

PyObject *lm_raise(lm_status status, const lm_fault *fault)
{
    if (PyErr_Occurred())
        return NULL;
    if (fault == NULL || fault->argument == NULL) {
        PyErr_SetString(exception_of(status), lm_status_text(status));
        return NULL;
    }
    char place[32] = "";
    if (fault->index >= 0)
        PyOS_snprintf(place, sizeof place, "[%zd]", (Py_ssize_t)fault->index);
    char *value = isfinite(fault->value) ? PyOS_double_to_string(fault->value, 'r', 0, 0, NULL) : NULL;
    PyErr_Format(exception_of(status), "%s%s is %s; expected %s", fault->argument, place,
                 value != NULL ? value : isnan(fault->value) ? "nan" : fault->value > 0 ? "inf" : "-inf",
                 fault->expected);
    PyMem_Free(value);
    return NULL;
}

/* _statuses() -> ((code name, sentence, exception), ...): walked by a test, so that no status lacks an exception. */
static PyObject *statuses(PyObject *module, PyObject *unused)
{
    (void)module;
    (void)unused;
#define LM_NAME(code, kind, text) #code,
    static const char *const names[] = {LM_STATUSES(LM_NAME)};
#undef LM_NAME
    PyObject *list = PyTuple_New(LM_STATUS_END);
    for (int s = 0; list != NULL && s < LM_STATUS_END; s++) {
        PyObject *exception = s == LM_OK ? Py_None : exception_of((lm_status)s);
        PyObject *row = Py_BuildValue("(ssO)", names[s], lm_status_text((lm_status)s), exception);
        if (row == NULL)
            Py_CLEAR(list);
        else
            PyTuple_SET_ITEM(list, s, row);
    }
    return list;
}

static PyMethodDef functions[] = {
    {"_statuses", statuses, METH_NOARGS, "_statuses($module, /)\n--\n\nThe statuses of the C library, for the tests."},
    {NULL, NULL, 0, NULL},
};

int lm_bind_status(PyObject *module)
{
    return PyModule_AddFunctions(module, functions);
}
