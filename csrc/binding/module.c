/* The module limen._core: a table of contents. */
#define LM_BINDING_OWNS_NUMPY
#include "binding.h"

#include <gsl/gsl_errno.h>

static int execute(PyObject *module)
{
    import_array1(-1);
    import_umath1(-1);
    gsl_set_error_handler_off(); /* process-wide; every GSL status is read where it arises */
    if (PyModule_AddStringConstant(module, "__version__", LM_VERSION) < 0)
        return -1;
#define LM_PART(name)                                                                                                  \
    if (lm_bind_##name(module) < 0)                                                                                    \
        return -1;
    LM_BINDING_PARTS(LM_PART)
#undef LM_PART
    return 0;
}

static int traverse(PyObject *module, visitproc visit, void *arg)
{
    lm_module_state *state = PyModule_GetState(module);
    if (state != NULL)
        Py_VISIT(state->density);
    return 0;
}

static int clear(PyObject *module)
{
    lm_module_state *state = PyModule_GetState(module);
    if (state != NULL)
        Py_CLEAR(state->density);
    return 0;
}

static PyModuleDef_Slot slots[] = {
    {Py_mod_exec, (void *)execute},
#if PY_VERSION_HEX >= 0x030C0000
    {Py_mod_multiple_interpreters, Py_MOD_MULTIPLE_INTERPRETERS_NOT_SUPPORTED}, /* NumPy does not load in them */
#endif
#if PY_VERSION_HEX >= 0x030D0000
    {Py_mod_gil, Py_MOD_GIL_NOT_USED},
#endif
    {0, NULL},
};

static struct PyModuleDef definition = {
    PyModuleDef_HEAD_INIT,
    .m_name = "limen._core",
    .m_doc = "The C core of limen; the documented face is the package limen.",
    .m_size = sizeof(lm_module_state),
    .m_slots = slots,
    .m_traverse = traverse,
    .m_clear = clear,
};

PyMODINIT_FUNC PyInit__core(void);

PyMODINIT_FUNC PyInit__core(void)
{
    return PyModuleDef_Init(&definition);
}
