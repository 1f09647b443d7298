/* What the files of the binding share: the module's state, the parts that fill the module, and status -> exception. */
#ifndef LM_BINDING_H
#define LM_BINDING_H

#define PY_SSIZE_T_CLEAN
#include <Python.h>

#ifndef LM_BINDING_OWNS_NUMPY
#define NO_IMPORT_ARRAY
#define NO_IMPORT_UFUNC
#endif
#include <numpy/arrayobject.h>
#include <numpy/ufuncobject.h>

#include "../limen.h"

/* Each part is one file with one function that adds its types and functions to the module: 0, or -1 with an error set.
 * Registering a file is one line here. */
#define LM_BINDING_PARTS(X) X(status) X(density) X(custom) X(decide) X(evidence) X(slice) X(slice_passes) X(soft)

#define LM_PART(name) int lm_bind_##name(PyObject *module);
LM_BINDING_PARTS(LM_PART)
#undef LM_PART

typedef struct {
    PyTypeObject *density; /* limen._core.Density */
} lm_module_state;

/* Sets the exception that a failed status stands for, from the fault where it names the argument; returns NULL. An
 * exception that is already set is kept. */
PyObject *lm_raise(lm_status status, const lm_fault *fault);

#endif
