/* limen._core.Soft: a log likelihood ratio or a posterior by its compiled table, over arrays of any layout. */
#include "../numeric/memory.h"
#include "density.h"
#include "slice.h"

typedef struct {
    PyObject_HEAD lm_log_ratio *ratio;
    lm_soft *soft;
    bool calls_back; /* the exact function may call Python */
} soft_object;

static void soft_dealloc(PyObject *self)
{
    PyTypeObject *type = Py_TYPE(self);
    soft_object *s = (soft_object *)self;
    lm_soft_free(s->soft);
    lm_log_ratio_free(s->ratio);
    type->tp_free(self);
    Py_DECREF(type);
}

static PyObject *compiled(PyTypeObject *type, lm_log_ratio *ratio, bool calls_back)
{
    lm_soft *soft = NULL;
    lm_status status;
    if (calls_back) {
        status = lm_log_ratio_compile(ratio, &soft);
    } else {
        Py_BEGIN_ALLOW_THREADS status = lm_log_ratio_compile(ratio, &soft);
        Py_END_ALLOW_THREADS
    }
    soft_object *self = status == LM_OK && !PyErr_Occurred() ? (soft_object *)type->tp_alloc(type, 0) : NULL;
    if (self == NULL) {
        lm_soft_free(soft);
        lm_log_ratio_free(ratio);
        return status == LM_OK ? NULL : lm_raise(status, NULL);
    }
    self->ratio = ratio;
    self->soft = soft;
    self->calls_back = calls_back;
    return (PyObject *)self;
}

/* Soft(densities, priors=None, state=0): the LLR of the first density against the second, or the posterior of a state
 * when there are priors. */
static PyObject *soft_new(PyTypeObject *type, PyObject *args, PyObject *keywords)
{
    static char *names[] = {"densities", "priors", "state", NULL};
    PyObject *tuple, *priors_object = Py_None;
    Py_ssize_t state = 0;
    if (!PyArg_ParseTupleAndKeywords(args, keywords, "O!|On", names, &PyTuple_Type, &tuple, &priors_object, &state))
        return NULL;
    const Py_ssize_t count = PyTuple_GET_SIZE(tuple);
    if (state < 0 || state >= count || (priors_object == Py_None && count != 2)) {
        PyErr_SetString(PyExc_ValueError, "expected two densities, or priors and one of the states");
        return NULL;
    }
    PyArrayObject *priors = NULL;
    lm_log_ratio *ratio = NULL;
    lm_fault fault = {.argument = NULL, .index = -1};
    lm_status status = LM_NO_MEMORY;
    bool calls_back = false;
    const lm_density **densities = lm_allocate((size_t)count, sizeof *densities);
    if (densities == NULL)
        return lm_raise(status, NULL);
    for (Py_ssize_t i = 0; i < count; i++) {
        densities[i] = lm_density_of(PyTuple_GET_ITEM(tuple, i), "densities");
        if (densities[i] == NULL)
            goto done;
        calls_back = calls_back || lm_density_calls_back(densities[i]);
    }
    if (priors_object == Py_None) {
        status = lm_log_ratio_new(densities[0], densities[1], &ratio, &fault);
    } else {
        priors = (PyArrayObject *)PyArray_FROMANY(priors_object, NPY_DOUBLE, 1, 1, NPY_ARRAY_CARRAY_RO);
        if (priors == NULL)
            goto done;
        if (PyArray_SIZE(priors) != count) {
            PyErr_SetString(PyExc_ValueError, "priors has not one number for each density");
            goto done;
        }
        status = lm_posterior_new(densities, PyArray_DATA(priors), (size_t)count, (size_t)state, &ratio, &fault);
    }
    if (status != LM_OK)
        lm_raise(status, &fault);
done:
    Py_XDECREF(priors);
    lm_release(densities);
    return ratio == NULL ? NULL : compiled(type, ratio, calls_back);
}

/* ---- values over arrays ---- */

typedef struct {
    const soft_object *self;
    lm_reading reading;
    lm_soft_output output;
    bool swapped;
    double step;
} values_context;

static lm_status values_part(void *context, char *const at[], const npy_intp stride[], npy_intp n)
{
    const values_context *c = context;
    PyGILState_STATE gil = PyGILState_UNLOCKED;
    if (c->self->calls_back)
        gil = PyGILState_Ensure();
    lm_status status = lm_soft_values(c->self->soft, c->reading, at[0], stride[0], c->swapped, (size_t)n, c->output,
                                      c->step, at[1], stride[1]);
    if (c->self->calls_back)
        PyGILState_Release(gil);
    return status;
}

static PyObject *soft_values(PyObject *self, PyObject *args, PyObject *keywords)
{
    static char *names[] = {"x", "out", "step", "threads", NULL};
    static const npy_uint32 flags[] = {NPY_ITER_READONLY, NPY_ITER_WRITEONLY};
    PyArrayObject *x, *out;
    double step = 1;
    unsigned threads = 1;
    if (!PyArg_ParseTupleAndKeywords(args, keywords, "O!O!|dI", names, &PyArray_Type, &x, &PyArray_Type, &out, &step,
                                     &threads))
        return NULL;
    values_context context = {.self = (soft_object *)self, .swapped = PyArray_ISBYTESWAPPED(x), .step = step};
    context.reading = lm_reading_of_array(x);
    if (context.reading == LM_READING_END)
        return NULL;
    const int type = PyArray_TYPE(out);
    if ((type != NPY_FLOAT && type != NPY_DOUBLE && type != NPY_INT8) || PyArray_ISBYTESWAPPED(out)) {
        PyErr_Format(PyExc_TypeError, "out holds %S; expected float32, float64 or int8",
                     (PyObject *)PyArray_DESCR(out));
        return NULL;
    }
    context.output = type == NPY_FLOAT ? LM_SOFT_F32 : type == NPY_DOUBLE ? LM_SOFT_F64 : LM_SOFT_I8;
    if (!PyArray_SAMESHAPE(x, out)) {
        PyErr_SetString(PyExc_ValueError, "out has another shape than x");
        return NULL;
    }
    if (PyArray_FailUnlessWriteable(out, "out") < 0)
        return NULL;
    if (lm_walk(2, (PyArrayObject *[]){x, out}, flags, values_part, &context, threads, NULL) < 0)
        return NULL;
    Py_INCREF(out);
    return (PyObject *)out;
}

/* The values of a ratio at x, without a table. */
static PyObject *exact_values(const lm_log_ratio *ratio, bool calls_back, PyObject *object)
{
    PyArrayObject *x = (PyArrayObject *)PyArray_FROMANY(object, NPY_DOUBLE, 0, 0, NPY_ARRAY_CARRAY_RO);
    if (x == NULL)
        return NULL;
    PyArrayObject *out = (PyArrayObject *)PyArray_SimpleNew(PyArray_NDIM(x), PyArray_DIMS(x), NPY_DOUBLE);
    if (out != NULL) {
        lm_status status;
        const size_t n = (size_t)PyArray_SIZE(x);
        if (calls_back) {
            status = lm_log_ratio_values(ratio, PyArray_DATA(x), PyArray_DATA(out), n);
        } else {
            Py_BEGIN_ALLOW_THREADS status = lm_log_ratio_values(ratio, PyArray_DATA(x), PyArray_DATA(out), n);
            Py_END_ALLOW_THREADS
        }
        if (status != LM_OK || PyErr_Occurred()) {
            lm_raise(status, NULL);
            Py_CLEAR(out);
        }
    }
    Py_DECREF(x);
    return out == NULL ? NULL : PyArray_Return(out);
}

/* exact(x): float64, without the table. */
static PyObject *soft_exact(PyObject *self, PyObject *object)
{
    const soft_object *s = (soft_object *)self;
    return exact_values(s->ratio, s->calls_back, object);
}

/* log_ratio(a, b, x): the exact log likelihood ratio, float64. */
static PyObject *log_ratio(PyObject *module, PyObject *const *args, Py_ssize_t n)
{
    (void)module;
    if (n != 3) {
        PyErr_SetString(PyExc_TypeError, "log_ratio takes two densities and readings");
        return NULL;
    }
    const lm_density *a = lm_density_of(args[0], "a"), *b = a == NULL ? NULL : lm_density_of(args[1], "b");
    if (b == NULL)
        return NULL;
    lm_log_ratio *ratio;
    lm_fault fault = {.argument = NULL, .index = -1};
    lm_status status = lm_log_ratio_new(a, b, &ratio, &fault);
    if (status != LM_OK)
        return lm_raise(status, &fault);
    PyObject *result = exact_values(ratio, lm_density_calls_back(a) || lm_density_calls_back(b), args[2]);
    lm_log_ratio_free(ratio);
    return result;
}

static PyObject *get_segments(PyObject *self, void *unused)
{
    (void)unused;
    return PyLong_FromSize_t(lm_soft_segments(((soft_object *)self)->soft));
}

static PyObject *get_span(PyObject *self, void *unused)
{
    (void)unused;
    const lm_range span = lm_soft_span(((soft_object *)self)->soft);
    return Py_BuildValue("(dd)", span.low, span.high);
}

static PyMethodDef methods[] = {
    {"values", (PyCFunction)(void (*)(void))soft_values, METH_VARARGS | METH_KEYWORDS,
     "values($self, /, x, out, step=1.0, threads=1)\n--\n\nFills out: float32, float64, or int8 in steps."},
    {"exact", soft_exact, METH_O, "exact($self, x, /)\n--\n\nThe values without the table, float64."},
    {NULL, NULL, 0, NULL},
};

static PyGetSetDef attributes[] = {
    {"segments", get_segments, NULL, "Segments of the table.", NULL},
    {"span", get_span, NULL, "The readings that the table covers; the others take the exact way.", NULL},
    {NULL, NULL, NULL, NULL, NULL},
};

static PyType_Slot slots[] = {
    {Py_tp_new, (void *)soft_new},
    {Py_tp_dealloc, (void *)soft_dealloc},
    {Py_tp_methods, methods},
    {Py_tp_getset, attributes},
    {Py_tp_doc, "Soft(densities, priors=None, state=0)\n--\n\nAn LLR or a posterior by table. See limen.Soft."},
    {0, NULL},
};

static PyType_Spec spec = {
    .name = "limen._core.Soft",
    .basicsize = sizeof(soft_object),
    .flags = Py_TPFLAGS_DEFAULT | Py_TPFLAGS_IMMUTABLETYPE,
    .slots = slots,
};

static PyMethodDef functions[] = {
    {"log_ratio", (PyCFunction)(void (*)(void))log_ratio, METH_FASTCALL,
     "log_ratio($module, a, b, x, /)\n--\n\nlog f_a(x) - log f_b(x), without cancellation. See limen.States.llr."},
    {NULL, NULL, 0, NULL},
};

int lm_bind_soft(PyObject *module)
{
    PyObject *type = PyType_FromModuleAndSpec(module, &spec, NULL);
    int failed = type == NULL || PyModule_AddObjectRef(module, "Soft", type) < 0;
    Py_XDECREF(type);
    return failed ? -1 : PyModule_AddFunctions(module, functions);
}
