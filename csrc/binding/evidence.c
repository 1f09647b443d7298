/* What recordings say, from Python's objects to the C library and back. */
#include "density.h"

/* A tuple of floats. */
static PyObject *floats(const double values[], size_t count)
{
    PyObject *tuple = PyTuple_New((Py_ssize_t)count);
    for (size_t i = 0; tuple != NULL && i < count; i++) {
        PyObject *value = PyFloat_FromDouble(values[i]);
        if (value == NULL)
            Py_CLEAR(tuple);
        else
            PyTuple_SET_ITEM(tuple, (Py_ssize_t)i, value);
    }
    return tuple;
}

/* The recipe of a density of recorded readings: its name and the numbers that _spline takes. */
static PyObject *spline_recipe(const lm_density *density)
{
    lm_spline_law law;
    if (!lm_density_spline_law(density, &law))
        return PyErr_Format(PyExc_SystemError, "the density has no spline law");
    return Py_BuildValue("(sNNN(dd)(dd)(d(dd)(dd)d))", "from_readings", floats(law.knot, law.knots),
                         floats(law.log_density, law.knots), floats(law.slope, law.knots), law.tail_scale[0],
                         law.tail_scale[1], law.tail_shape[0], law.tail_shape[1], law.readings, law.tail_readings[0],
                         law.tail_readings[1], law.tail_shape_error[0], law.tail_shape_error[1], law.step);
}

static PyObject *wrap(PyObject *type, lm_density *density)
{
    return lm_density_wrap((PyTypeObject *)type, density, spline_recipe(density));
}

/* from_readings(type, readings) */
static PyObject *from_readings(PyObject *module, PyObject *args)
{
    (void)module;
    PyObject *type, *given;
    if (!PyArg_ParseTuple(args, "O!O:from_readings", &PyType_Type, &type, &given))
        return NULL;
    PyArrayObject *readings = (PyArrayObject *)PyArray_FROMANY(given, NPY_DOUBLE, 1, 1, NPY_ARRAY_IN_ARRAY);
    if (readings == NULL)
        return NULL;
    lm_density *density = NULL;
    lm_fault fault = {.index = -1};
    lm_status status;
    Py_BEGIN_ALLOW_THREADS
    status = lm_density_from_readings(PyArray_DATA(readings), (size_t)PyArray_SIZE(readings), &density, &fault);
    Py_END_ALLOW_THREADS
    Py_DECREF(readings);
    return status != LM_OK ? lm_raise(status, &fault) : wrap(type, density);
}

/* spline(type, knots, log densities, slopes, tail scales, tail shapes, about): what a recipe holds */
static PyObject *spline(PyObject *module, PyObject *args)
{
    (void)module;
    PyObject *type, *given[3];
    lm_spline_law law = {0};
    if (!PyArg_ParseTuple(args, "O!OOO(dd)(dd)(d(dd)(dd)d):spline", &PyType_Type, &type, &given[0], &given[1],
                          &given[2], &law.tail_scale[0], &law.tail_scale[1], &law.tail_shape[0], &law.tail_shape[1],
                          &law.readings, &law.tail_readings[0], &law.tail_readings[1], &law.tail_shape_error[0],
                          &law.tail_shape_error[1], &law.step))
        return NULL;
    PyArrayObject *array[3] = {NULL, NULL, NULL};
    PyObject *result = NULL;
    for (int i = 0; i < 3; i++) {
        array[i] = (PyArrayObject *)PyArray_FROMANY(given[i], NPY_DOUBLE, 1, 1, NPY_ARRAY_IN_ARRAY);
        if (array[i] == NULL)
            goto done;
        if (PyArray_SIZE(array[i]) != PyArray_SIZE(array[0])) {
            PyErr_SetString(PyExc_ValueError, "knots, log densities and slopes differ in number");
            goto done;
        }
    }
    law.knots = (size_t)PyArray_SIZE(array[0]);
    law.knot = PyArray_DATA(array[0]);
    law.log_density = PyArray_DATA(array[1]);
    law.slope = PyArray_DATA(array[2]);
    lm_density *density = NULL;
    lm_fault fault = {.index = -1};
    lm_status status = lm_density_spline(&law, &density, &fault);
    result = status != LM_OK ? lm_raise(status, &fault) : wrap(type, density);
done:
    for (int i = 0; i < 3; i++)
        Py_XDECREF(array[i]);
    return result;
}

/* pareto_tail(readings, threshold) -> (readings above, scale, shape, their standard errors, log likelihood) */
static PyObject *pareto_tail(PyObject *module, PyObject *args)
{
    (void)module;
    PyObject *given;
    double threshold;
    if (!PyArg_ParseTuple(args, "Od:pareto_tail", &given, &threshold))
        return NULL;
    PyArrayObject *readings = (PyArrayObject *)PyArray_FROMANY(given, NPY_DOUBLE, 1, 1, NPY_ARRAY_IN_ARRAY);
    if (readings == NULL)
        return NULL;
    lm_pareto_tail tail;
    lm_fault fault = {.index = -1};
    lm_status status = lm_pareto_fit(PyArray_DATA(readings), (size_t)PyArray_SIZE(readings), threshold, &tail, &fault);
    Py_DECREF(readings);
    return status != LM_OK ? lm_raise(status, &fault)
                           : Py_BuildValue("(dddddd)", tail.readings, tail.scale, tail.shape, tail.scale_error,
                                           tail.shape_error, tail.log_likelihood);
}

static PyObject *error_bounds(PyObject *module, PyObject *args)
{
    (void)module;
    double errors, trials, confidence;
    if (!PyArg_ParseTuple(args, "ddd:error_bounds", &errors, &trials, &confidence))
        return NULL;
    lm_range bounds;
    lm_fault fault = {.index = -1};
    lm_status status = lm_error_bounds(errors, trials, confidence, &bounds, &fault);
    return status != LM_OK ? lm_raise(status, &fault) : Py_BuildValue("(dd)", bounds.low, bounds.high);
}

static PyMethodDef functions[] = {
    {"from_readings", from_readings, METH_VARARGS,
     "from_readings($module, type, readings, /)\n--\n\nThe density of recorded readings."},
    {"spline", spline, METH_VARARGS,
     "spline($module, type, knots, log_densities, slopes, tail_scales, tail_shapes, about, /)\n--\n\n"
     "The density that a recipe of from_readings describes."},
    {"pareto_tail", pareto_tail, METH_VARARGS,
     "pareto_tail($module, readings, threshold, /)\n--\n\nThe likeliest generalized Pareto tail above a threshold."},
    {"error_bounds", error_bounds, METH_VARARGS,
     "error_bounds($module, errors, trials, confidence, /)\n--\n\nExact bounds of a rate."},
    {NULL, NULL, 0, NULL},
};

int lm_bind_evidence(PyObject *module)
{
    return PyModule_AddFunctions(module, functions);
}
