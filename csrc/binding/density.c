/* limen._core.Density: a density of the C library with the recipe it was made by, and its methods over arrays.
 *
 * The recipe is a tuple of plain hashable values: ("gaussian", (0.8, 0.05)), ("mixture", weights, parts) or ("moved",
 * part, shift, scale). Equality, hash, pickling, repr and to_dict of the Python class all follow from it.
 */
#include "density.h"

#include <math.h>
#include <structmember.h>

#include "../density/family.h"
#include "../numeric/memory.h"

typedef struct {
    PyObject_HEAD
    lm_density *density;
    PyObject *recipe;
} density_object;


/* The Density type and those derived from it are recognised by how they end, so that no module state is looked up. */
static void density_dealloc(PyObject *self);

static bool is_density(PyObject *object)
{
    for (PyTypeObject *type = Py_TYPE(object); type != NULL; type = type->tp_base)
        if (type->tp_dealloc == density_dealloc)
            return true;
    return false;
}

const lm_density *lm_density_of(PyObject *object, const char *argument)
{
    if (!is_density(object)) {
        PyErr_Format(PyExc_TypeError, "%s is %R; expected a density", argument, object);
        return NULL;
    }
    return ((density_object *)object)->density;
}

bool lm_density_calls_back(const lm_density *density)
{
    for (size_t t = 0; t < density->count; t++)
        if (density->term[t].family->fallible)
            return true;
    return false;
}

PyObject *lm_density_wrap(PyTypeObject *type, lm_density *density, PyObject *recipe)
{
    density_object *self = recipe == NULL ? NULL : (density_object *)type->tp_alloc(type, 0);
    if (self == NULL) {
        lm_density_release(density);
        Py_XDECREF(recipe);
        return NULL;
    }
    self->density = density;
    self->recipe = recipe;
    return (PyObject *)self;
}

static void density_dealloc(PyObject *self)
{
    PyTypeObject *type = Py_TYPE(self);
    density_object *d = (density_object *)self;
    if (PyType_IS_GC(type))
        PyObject_GC_UnTrack(self);
    lm_density_release(d->density);
    Py_XDECREF(d->recipe);
    type->tp_free(self);
    Py_DECREF(type);
}

static PyObject *refuse_new(PyTypeObject *type, PyObject *args, PyObject *kwargs)
{
    (void)args;
    (void)kwargs;
    PyErr_Format(PyExc_TypeError, "%s is made by its constructors, such as limen.gaussian(mean, sd)", type->tp_name);
    return NULL;
}

/* ---- making ---- */

/* _make(family, *parameters) */
static PyObject *make(PyObject *type, PyObject *const *args, Py_ssize_t n)
{
    double parameters[LM_PARAMETERS];
    if (n < 1 || n > LM_PARAMETERS + 1 || !PyUnicode_Check(args[0])) {
        PyErr_SetString(PyExc_TypeError, "_make takes a family's name and its parameters");
        return NULL;
    }
    const char *name = PyUnicode_AsUTF8(args[0]);
    PyObject *values = PyTuple_New(n - 1);
    if (name == NULL || values == NULL) {
        Py_XDECREF(values);
        return NULL;
    }
    for (Py_ssize_t i = 1; i < n; i++) {
        parameters[i - 1] = PyFloat_AsDouble(args[i]);
        PyObject *value = PyErr_Occurred() ? NULL : PyFloat_FromDouble(parameters[i - 1]);
        if (value == NULL) {
            Py_DECREF(values);
            return NULL;
        }
        PyTuple_SET_ITEM(values, i - 1, value);
    }
    lm_density *density = NULL;
    lm_fault fault = {.index = -1};
    lm_status status = lm_density_new(name, parameters, (size_t)(n - 1), &density, &fault);
    if (status != LM_OK) {
        Py_DECREF(values);
        return lm_raise(status, &fault);
    }
    PyObject *recipe = PyTuple_Pack(2, args[0], values);
    Py_DECREF(values);
    return lm_density_wrap((PyTypeObject *)type, density, recipe);
}

/* _mix(weights, parts): tuples of floats and of densities */
static PyObject *mix(PyObject *type, PyObject *const *args, Py_ssize_t n)
{
    if (n != 2 || !PyTuple_Check(args[0]) || !PyTuple_Check(args[1]) ||
        PyTuple_GET_SIZE(args[0]) != PyTuple_GET_SIZE(args[1])) {
        PyErr_SetString(PyExc_ValueError, "weights and densities differ in number; expected one weight a density");
        return NULL;
    }
    size_t count = (size_t)PyTuple_GET_SIZE(args[0]);
    double *weights = lm_allocate(count, sizeof *weights);
    const lm_density **parts = lm_allocate(count, sizeof *parts);
    lm_density *density = NULL;
    PyObject *result = NULL;
    if (weights == NULL || parts == NULL) {
        PyErr_NoMemory();
        goto done;
    }
    for (size_t i = 0; i < count; i++) {
        weights[i] = PyFloat_AsDouble(PyTuple_GET_ITEM(args[0], (Py_ssize_t)i));
        parts[i] = PyErr_Occurred() ? NULL : lm_density_of(PyTuple_GET_ITEM(args[1], (Py_ssize_t)i), "densities");
        if (parts[i] == NULL)
            goto done;
    }
    lm_fault fault = {.index = -1};
    lm_status status = lm_density_mixture(weights, parts, count, &density, &fault);
    if (status != LM_OK)
        lm_raise(status, &fault);
    else
        result = lm_density_wrap((PyTypeObject *)type, density, Py_BuildValue("(sOO)", "mixture", args[0], args[1]));
done:
    lm_release(weights);
    lm_release(parts);
    return result;
}

/* _moved(shift, scale) */
static PyObject *moved(PyObject *self, PyObject *const *args, Py_ssize_t n)
{
    double shift = n == 2 ? PyFloat_AsDouble(args[0]) : 0, scale = n == 2 ? PyFloat_AsDouble(args[1]) : 0;
    if (n != 2 || PyErr_Occurred()) {
        if (!PyErr_Occurred())
            PyErr_SetString(PyExc_TypeError, "_moved takes shift and scale");
        return NULL;
    }
    lm_density *density = NULL;
    lm_fault fault = {.index = -1};
    lm_status status = lm_density_moved(((density_object *)self)->density, shift, scale, &density, &fault);
    if (status != LM_OK)
        return lm_raise(status, &fault);
    return lm_density_wrap(Py_TYPE(self), density, Py_BuildValue("(sOdd)", "moved", self, shift, scale));
}

/* ---- evaluating ---- */

typedef lm_status (*evaluator)(const lm_density *density, const double x[], double out[], size_t n);

static lm_status evaluate_pdf(const lm_density *density, const double x[], double out[], size_t n)
{
    LM_TRY(lm_density_log_pdf(density, x, out, n));
    for (size_t i = 0; i < n; i++)
        out[i] = exp(out[i]);
    return LM_OK;
}

static lm_status evaluate_cdf(const lm_density *density, const double x[], double out[], size_t n)
{
    LM_TRY(lm_density_log_cdf(density, x, out, n));
    for (size_t i = 0; i < n; i++)
        out[i] = exp(out[i]);
    return LM_OK;
}

static lm_status evaluate_sf(const lm_density *density, const double x[], double out[], size_t n)
{
    LM_TRY(lm_density_log_sf(density, x, out, n));
    for (size_t i = 0; i < n; i++)
        out[i] = exp(out[i]);
    return LM_OK;
}

static lm_status quantiles(const lm_density *density, const double q[], double out[], size_t n, bool upper)
{
    for (size_t i = 0; i < n; i++)
        LM_TRY(lm_density_quantile(density, log(q[i]), upper, &out[i]));
    return LM_OK;
}

static lm_status evaluate_ppf(const lm_density *density, const double q[], double out[], size_t n)
{
    return quantiles(density, q, out, n, false);
}

static lm_status evaluate_isf(const lm_density *density, const double q[], double out[], size_t n)
{
    return quantiles(density, q, out, n, true);
}

/* A quantile of what is no probability has no answer. */
static bool refuse_probabilities(const double q[], size_t n, bool scalar)
{
    for (size_t i = 0; i < n; i++)
        if (!(q[i] >= 0 && q[i] <= 1)) {
            lm_fault fault = {.argument = "q",
                              .expected = "probabilities from 0 to 1",
                              .value = q[i],
                              .index = scalar ? -1 : (ptrdiff_t)i};
            lm_raise(LM_DOMAIN, &fault);
            return true;
        }
    return false;
}

/* Below this many readings handing the GIL over costs more than it gives. */
enum { FEW = 2048 };

static int run(evaluator evaluate, const lm_density *density, const double x[], double out[], size_t n)
{
    lm_status status;
    if (n < FEW || lm_density_calls_back(density)) {
        status = evaluate(density, x, out, n);
    } else {
        Py_BEGIN_ALLOW_THREADS
        status = evaluate(density, x, out, n);
        Py_END_ALLOW_THREADS
    }
    if (status != LM_OK)
        lm_raise(status, NULL);
    return status == LM_OK ? 0 : -1;
}

static bool accept_out(PyObject *out, PyArrayObject *x)
{
    if (!PyArray_Check(out)) {
        PyErr_Format(PyExc_TypeError, "out is %R; expected a NumPy array", out);
        return false;
    }
    PyArrayObject *array = (PyArrayObject *)out;
    if (PyArray_TYPE(array) != NPY_DOUBLE && PyArray_TYPE(array) != NPY_FLOAT) {
        PyErr_Format(PyExc_TypeError, "out has dtype %S; expected float64 or float32", PyArray_DESCR(array));
        return false;
    }
    if (!PyArray_ISWRITEABLE(array)) {
        PyErr_SetString(PyExc_ValueError, "out is read-only; expected an array that may be written");
        return false;
    }
    if (!PyArray_SAMESHAPE(array, x)) {
        PyErr_SetString(PyExc_ValueError, "out has another shape than x; expected the shape of x");
        return false;
    }
    return true;
}

static PyObject *over(PyObject *self, PyObject *const *args, Py_ssize_t n, PyObject *names, evaluator evaluate,
                      bool probabilities)
{
    const lm_density *density = ((density_object *)self)->density;
    Py_ssize_t named = names == NULL ? 0 : PyTuple_GET_SIZE(names);
    PyObject *out = NULL;
    if (n == 2 && named == 0)
        out = args[1];
    else if (n == 1 && named == 1 && PyUnicode_CompareWithASCIIString(PyTuple_GET_ITEM(names, 0), "out") == 0)
        out = args[1];
    else if (n != 1 || named != 0) {
        PyErr_SetString(PyExc_TypeError, "expected one array of readings (or probabilities) and, optionally, out=");
        return NULL;
    }
    if (out == Py_None)
        out = NULL;
    if (out == NULL && (PyFloat_Check(args[0]) || PyLong_CheckExact(args[0]))) {
        double x = PyFloat_AsDouble(args[0]), y;
        if (PyErr_Occurred() || (probabilities && refuse_probabilities(&x, 1, true)) ||
            run(evaluate, density, &x, &y, 1) < 0)
            return NULL;
        return PyFloat_FromDouble(y);
    }
    PyArrayObject *given = (PyArrayObject *)PyArray_FROM_O(args[0]), *x = NULL, *y = NULL;
    PyObject *result = NULL;
    if (given == NULL)
        return NULL;
    if (!PyArray_ISINTEGER(given) && !PyArray_ISFLOAT(given) && !PyArray_ISBOOL(given)) {
        PyErr_Format(PyExc_TypeError, "%s holds %S; expected real numbers", probabilities ? "q" : "x",
                     PyArray_DESCR(given));
        goto done;
    }
    bool narrow = PyArray_TYPE(given) == NPY_FLOAT || PyArray_TYPE(given) == NPY_HALF;
    if (out != NULL && !accept_out(out, given))
        goto done;
    x = (PyArrayObject *)PyArray_FROM_OTF((PyObject *)given, NPY_DOUBLE, NPY_ARRAY_IN_ARRAY);
    if (x == NULL)
        goto done;
    size_t count = (size_t)PyArray_SIZE(x);
    if (probabilities && refuse_probabilities(PyArray_DATA(x), count, PyArray_NDIM(x) == 0))
        goto done;
    bool direct = out != NULL && PyArray_TYPE((PyArrayObject *)out) == NPY_DOUBLE &&
                  PyArray_ISCARRAY((PyArrayObject *)out) && out != args[0];
    y = direct ? (PyArrayObject *)Py_NewRef(out)
               : (PyArrayObject *)PyArray_SimpleNew(PyArray_NDIM(x), PyArray_DIMS(x), NPY_DOUBLE);
    if (y == NULL || run(evaluate, density, PyArray_DATA(x), PyArray_DATA(y), count) < 0)
        goto done;
    if (out != NULL) {
        if (!direct && PyArray_CopyInto((PyArrayObject *)out, y) < 0)
            goto done;
        result = Py_NewRef(out);
    } else if (narrow) {
        result = PyArray_Return((PyArrayObject *)PyArray_Cast(y, NPY_FLOAT));
    } else {
        result = PyArray_Return((PyArrayObject *)Py_NewRef((PyObject *)y));
    }
done:
    Py_DECREF(given);
    Py_XDECREF(x);
    Py_XDECREF(y);
    return result;
}

#define LM_METHODS(X)                                                                                                  \
    X(logpdf, lm_density_log_pdf, false, "Log density at each reading; log mass for counts.")                          \
    X(pdf, evaluate_pdf, false, "Density at each reading; mass for counts.")                                           \
    X(cdf, evaluate_cdf, false, "P(X <= x).")                                                                          \
    X(sf, evaluate_sf, false, "P(X > x).")                                                                             \
    X(logcdf, lm_density_log_cdf, false, "log P(X <= x).")                                                             \
    X(logsf, lm_density_log_sf, false, "log P(X > x).")                                                                \
    X(ppf, evaluate_ppf, true, "The reading below which the fraction q lies.")                                         \
    X(isf, evaluate_isf, true, "The reading above which the fraction q lies.")

#define LM_METHOD(name, evaluate, probabilities, text)                                                                 \
    static PyObject *method_##name(PyObject *self, PyObject *const *args, Py_ssize_t n, PyObject *names)               \
    {                                                                                                                  \
        return over(self, args, n, names, evaluate, probabilities);                                                    \
    }
LM_METHODS(LM_METHOD)
#undef LM_METHOD

/* ---- attributes ---- */

static PyObject *moment(PyObject *self, int which)
{
    double mean, variance;
    lm_status status = lm_density_moments(((density_object *)self)->density, &mean, &variance);
    if (status != LM_OK)
        return lm_raise(status, NULL);
    return PyFloat_FromDouble(which == 0 ? mean : which == 1 ? variance : sqrt(variance));
}

static PyObject *get_mean(PyObject *self, void *unused)
{
    (void)unused;
    return moment(self, 0);
}

static PyObject *get_var(PyObject *self, void *unused)
{
    (void)unused;
    return moment(self, 1);
}

static PyObject *get_sd(PyObject *self, void *unused)
{
    (void)unused;
    return moment(self, 2);
}

static PyObject *get_support(PyObject *self, void *unused)
{
    (void)unused;
    lm_range support = lm_density_support(((density_object *)self)->density);
    return Py_BuildValue("(dd)", support.low, support.high);
}

static PyObject *get_discrete(PyObject *self, void *unused)
{
    (void)unused;
    return PyBool_FromLong(lm_density_discrete(((density_object *)self)->density));
}

static PyObject *get_recipe(PyObject *self, void *unused)
{
    (void)unused;
    return Py_NewRef(((density_object *)self)->recipe);
}

static Py_hash_t density_hash(PyObject *self)
{
    return PyObject_Hash(((density_object *)self)->recipe);
}

static PyObject *density_compare(PyObject *self, PyObject *other, int operator)
{
    if ((operator!= Py_EQ && operator!= Py_NE) || !is_density(other))
        Py_RETURN_NOTIMPLEMENTED;
    return PyObject_RichCompare(((density_object *)self)->recipe, ((density_object *)other)->recipe, operator);
}

#define LM_ENTRY(name, evaluate, probabilities, text)                                                                  \
    {#name, (PyCFunction)(void (*)(void))method_##name, METH_FASTCALL | METH_KEYWORDS,                                 \
     #name "($self, x, out=None)\n--\n\n" text},
static PyMethodDef methods[] = {
    LM_METHODS(LM_ENTRY){"_make", (PyCFunction)(void (*)(void))make, METH_FASTCALL | METH_CLASS,
                         "_make($type, family, /, *parameters)\n--\n\nA member of a built-in family."},
    {"_mix", (PyCFunction)(void (*)(void))mix, METH_FASTCALL | METH_CLASS,
     "_mix($type, weights, densities, /)\n--\n\nA mixture."},
    {"_moved", (PyCFunction)(void (*)(void))moved, METH_FASTCALL,
     "_moved($self, shift, scale, /)\n--\n\nThe law of shift + scale * reading."},
    {NULL, NULL, 0, NULL},
};
#undef LM_ENTRY

static PyGetSetDef attributes[] = {
    {"mean", get_mean, NULL, "Mean; NaN where there is none.", NULL},
    {"var", get_var, NULL, "Variance; inf where it diverges, NaN where there is none.", NULL},
    {"sd", get_sd, NULL, "Standard deviation.", NULL},
    {"support", get_support, NULL, "The smallest closed interval with all the probability.", NULL},
    {"discrete", get_discrete, NULL, "Whether readings are counts or points only.", NULL},
    {"_recipe", get_recipe, NULL, "How it was made.", NULL},
    {NULL, NULL, NULL, NULL, NULL},
};

static PyType_Slot slots[] = {
    {Py_tp_new, (void *)refuse_new},
    {Py_tp_dealloc, (void *)density_dealloc},
    {Py_tp_methods, methods},
    {Py_tp_getset, attributes},
    {Py_tp_hash, (void *)density_hash},
    {Py_tp_richcompare, (void *)density_compare},
    {Py_tp_doc, "The law of a reading in one state, as the C core holds it."},
    {0, NULL},
};

static PyType_Spec spec = {
    .name = "limen._core.Density",
    .basicsize = sizeof(density_object),
    .flags = Py_TPFLAGS_DEFAULT | Py_TPFLAGS_BASETYPE | Py_TPFLAGS_IMMUTABLETYPE,
    .slots = slots,
};

/* _families() -> {name: (parameter names)} */
static PyObject *families(PyObject *module, PyObject *unused)
{
    (void)module;
    (void)unused;
    PyObject *all = PyDict_New();
    for (size_t f = 0; all != NULL && f < lm_family_count(); f++) {
        size_t count = 0;
        while (lm_family_parameter(f, count) != NULL)
            count++;
        PyObject *names = PyTuple_New((Py_ssize_t)count);
        for (size_t i = 0; names != NULL && i < count; i++) {
            PyObject *name = PyUnicode_FromString(lm_family_parameter(f, i));
            if (name == NULL)
                Py_CLEAR(names);
            else
                PyTuple_SET_ITEM(names, (Py_ssize_t)i, name);
        }
        if (names == NULL || PyDict_SetItemString(all, lm_family_name(f), names) < 0)
            Py_CLEAR(all);
        Py_XDECREF(names);
    }
    return all;
}

static PyMethodDef functions[] = {
    {"_families", families, METH_NOARGS, "_families($module, /)\n--\n\nThe families and their parameters' names."},
    {NULL, NULL, 0, NULL},
};

int lm_bind_density(PyObject *module)
{
    lm_module_state *state = PyModule_GetState(module);
    state->density = (PyTypeObject *)PyType_FromModuleAndSpec(module, &spec, NULL);
    if (state->density == NULL || PyModule_AddObjectRef(module, "Density", (PyObject *)state->density) < 0)
        return -1;
    return PyModule_AddFunctions(module, functions);
}
