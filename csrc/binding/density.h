/* What other files of the binding need of limen._core.Density. */
#ifndef LM_BINDING_DENSITY_H
#define LM_BINDING_DENSITY_H

#include "binding.h"

/* The density of a Density object, borrowed; NULL with a TypeError that names `argument` where it is none. */
const lm_density *lm_density_of(PyObject *object, const char *argument);

/* A new object of `type` (limen._core.Density or derived) that takes over the density and the recipe, on failure
 * too. */
PyObject *lm_density_wrap(PyTypeObject *type, lm_density *density, PyObject *recipe);

/* Whether evaluating it may call back into Python, so that the GIL must be held. */
bool lm_density_calls_back(const lm_density *density);

#endif
