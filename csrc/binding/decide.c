/* The level search and the assessment, from Python's objects to the C library and back. */
#include <math.h>

#include "../numeric/memory.h"
#include "density.h"

/* The densities of a tuple, borrowed, in an array that the caller releases; whether any of them calls back. */
static const lm_density **densities_of(PyObject *tuple, size_t *count, bool *calls_back)
{
    if (!PyTuple_Check(tuple)) {
        PyErr_SetString(PyExc_TypeError, "densities must be a tuple");
        return NULL;
    }
    *count = (size_t)PyTuple_GET_SIZE(tuple);
    *calls_back = false;
    const lm_density **densities = lm_allocate(*count, sizeof *densities);
    if (densities == NULL) {
        PyErr_NoMemory();
        return NULL;
    }
    for (size_t i = 0; i < *count; i++) {
        densities[i] = lm_density_of(PyTuple_GET_ITEM(tuple, (Py_ssize_t)i), "densities");
        if (densities[i] == NULL) {
            lm_release(densities);
            return NULL;
        }
        *calls_back |= lm_density_calls_back(densities[i]);
    }
    return densities;
}

static PyArrayObject *array_of(PyObject *object, int type, int dimensions)
{
    return (PyArrayObject *)PyArray_FROMANY(object, type, dimensions, dimensions, NPY_ARRAY_IN_ARRAY);
}

/* A read-only array, copied from memory. */
static PyObject *frozen(const void *data, size_t count, int type, size_t size)
{
    npy_intp shape[1] = {(npy_intp)count};
    PyArrayObject *array = (PyArrayObject *)PyArray_SimpleNew(1, shape, type);
    if (array == NULL)
        return NULL;
    if (count > 0)
        memcpy(PyArray_DATA(array), data, count * size);
    PyArray_CLEARFLAGS(array, NPY_ARRAY_WRITEABLE);
    return (PyObject *)array;
}

/* bayes(densities, priors, costs) -> (levels, decisions, (pieces, touches, unresolved, sampled, resolution)) */
static PyObject *bayes(PyObject *module, PyObject *const *args, Py_ssize_t n)
{
    (void)module;
    if (n != 3) {
        PyErr_SetString(PyExc_TypeError, "bayes takes densities, priors and costs");
        return NULL;
    }
    size_t states = 0, decisions = 0;
    bool calls_back = false;
    PyArrayObject *priors = NULL, *costs = NULL;
    PyObject *result = NULL;
    const lm_density **densities = densities_of(args[0], &states, &calls_back);
    if (densities == NULL)
        return NULL;
    priors = array_of(args[1], NPY_DOUBLE, 1);
    costs = args[2] == Py_None || priors == NULL ? NULL : array_of(args[2], NPY_DOUBLE, 2);
    if (priors == NULL || (args[2] != Py_None && costs == NULL))
        goto done;
    decisions = costs == NULL ? states : (size_t)PyArray_DIM(costs, 0);
    if ((size_t)PyArray_SIZE(priors) != states || (costs != NULL && (size_t)PyArray_DIM(costs, 1) != states)) {
        PyErr_SetString(PyExc_ValueError, "priors and costs must have one number for each state");
        goto done;
    }
    lm_rule rule = {0};
    lm_fault fault = {.index = -1};
    lm_status status;
    const double *matrix = costs == NULL ? NULL : PyArray_DATA(costs);
    if (calls_back) {
        status = lm_bayes(densities, PyArray_DATA(priors), states, matrix, decisions, &rule, &fault);
    } else {
        Py_BEGIN_ALLOW_THREADS
        status = lm_bayes(densities, PyArray_DATA(priors), states, matrix, decisions, &rule, &fault);
        Py_END_ALLOW_THREADS
    }
    if (status != LM_OK || PyErr_Occurred()) {
        if (status == LM_OK)
            lm_rule_free(&rule);
        lm_raise(status, &fault);
        goto done;
    }
    PyObject *levels = frozen(rule.levels, rule.count, NPY_DOUBLE, sizeof(double));
    PyObject *chosen = frozen(rule.decisions, rule.count + 1, NPY_INTP, sizeof(size_t));
    const lm_search *s = &rule.search;
    PyObject *search = Py_BuildValue("(nnnnd)", (Py_ssize_t)s->pieces, (Py_ssize_t)s->touches,
                                     (Py_ssize_t)s->unresolved, (Py_ssize_t)s->sampled, s->resolution);
    if (levels != NULL && chosen != NULL && search != NULL)
        result = PyTuple_Pack(3, levels, chosen, search);
    Py_XDECREF(levels);
    Py_XDECREF(chosen);
    Py_XDECREF(search);
    lm_rule_free(&rule);
done:
    Py_XDECREF(priors);
    Py_XDECREF(costs);
    lm_release(densities);
    return result;
}

/* transition(levels, decisions, decisions_count, densities) -> float64[decision, state] of log probabilities */
static PyObject *transition(PyObject *module, PyObject *args)
{
    (void)module;
    PyObject *given_levels, *given_decisions, *tuple, *result = NULL;
    Py_ssize_t decisions;
    if (!PyArg_ParseTuple(args, "OOnO:transition", &given_levels, &given_decisions, &decisions, &tuple))
        return NULL;
    size_t states = 0;
    bool calls_back = false;
    const lm_density **densities = densities_of(tuple, &states, &calls_back);
    if (densities == NULL)
        return NULL;
    PyArrayObject *levels = array_of(given_levels, NPY_DOUBLE, 1);
    PyArrayObject *chosen = levels == NULL ? NULL : array_of(given_decisions, NPY_INTP, 1);
    if (chosen == NULL)
        goto done;
    if (PyArray_SIZE(chosen) != PyArray_SIZE(levels) + 1 || decisions < 1) {
        PyErr_SetString(PyExc_ValueError, "expected one decision more than levels");
        goto done;
    }
    npy_intp shape[2] = {decisions, (npy_intp)states};
    result = PyArray_SimpleNew(2, shape, NPY_DOUBLE);
    if (result == NULL)
        goto done;
    lm_status status = lm_transition(PyArray_DATA(levels), PyArray_DATA(chosen), (size_t)PyArray_SIZE(levels),
                                     densities, states, (size_t)decisions, PyArray_DATA((PyArrayObject *)result));
    if (status != LM_OK || PyErr_Occurred()) {
        Py_CLEAR(result);
        lm_raise(status, NULL);
    }
done:
    Py_XDECREF(levels);
    Py_XDECREF(chosen);
    lm_release(densities);
    return result;
}

/* log_risk(log_transition, priors, costs) -> (log of the positive part, log of the negative part) */
static PyObject *log_risk(PyObject *module, PyObject *args)
{
    (void)module;
    PyObject *given, *given_priors, *given_costs, *result = NULL;
    if (!PyArg_ParseTuple(args, "OOO:log_risk", &given, &given_priors, &given_costs))
        return NULL;
    PyArrayObject *matrix = array_of(given, NPY_DOUBLE, 2), *priors = NULL, *costs = NULL;
    if (matrix == NULL)
        return NULL;
    priors = array_of(given_priors, NPY_DOUBLE, 1);
    costs = given_costs == Py_None || priors == NULL ? NULL : array_of(given_costs, NPY_DOUBLE, 2);
    if (priors == NULL || (given_costs != Py_None && costs == NULL))
        goto done;
    if (PyArray_SIZE(priors) != PyArray_DIM(matrix, 1) || (costs != NULL && !PyArray_SAMESHAPE(costs, matrix))) {
        PyErr_SetString(PyExc_ValueError, "priors and costs must fit the transition matrix");
        goto done;
    }
    double positive, negative;
    lm_log_risk(PyArray_DATA(matrix), PyArray_DATA(priors), (size_t)PyArray_DIM(matrix, 1),
                costs == NULL ? NULL : PyArray_DATA(costs), (size_t)PyArray_DIM(matrix, 0), &positive, &negative);
    result = Py_BuildValue("(dd)", positive, negative);
done:
    Py_DECREF(matrix);
    Py_XDECREF(priors);
    Py_XDECREF(costs);
    return result;
}

static PyMethodDef functions[] = {
    {"bayes", (PyCFunction)(void (*)(void))bayes, METH_FASTCALL,
     "bayes($module, densities, priors, costs, /)\n--\n\nThe rule of least prior-weighted cost."},
    {"transition", transition, METH_VARARGS,
     "transition($module, levels, decisions, count, densities, /)\n--\n\nLog probabilities of decisions by state."},
    {"log_risk", log_risk, METH_VARARGS,
     "log_risk($module, log_transition, priors, costs, /)\n--\n\nLogs of the positive and negative parts of a risk."},
    {NULL, NULL, 0, NULL},
};

int lm_bind_decide(PyObject *module)
{
    return PyModule_AddFunctions(module, functions);
}
