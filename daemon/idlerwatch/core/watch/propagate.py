"""Values and their uncertainty out of one call of a vectorised function.

The first row is the sample, each further row has one input moved by its standard uncertainty. The root of the sum of
squares of the differences is the first-order combined uncertainty for independent inputs, and does not fail at a kink
such as that of a largest deviation.

References
----------
JCGM 100 (GUM), 5.1.3 note 2: sensitivity coefficients found numerically by moving an input by its uncertainty.
"""

import math
from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from idlerwatch.core.watch.channel import MISSING, Measured

Floats = npt.NDArray[np.float64]


def propagate(function: Callable[[Floats], Floats], inputs: tuple[Measured, ...]) -> Measured:
    """Return a function of independent inputs with its combined standard uncertainty; missing where an input is.

    `function` takes (..., n) and gives (...).
    """
    values = [measured.value for measured in inputs]
    if math.isnan(sum(values)):
        return MISSING
    moved = [values]
    for index, measured in enumerate(inputs):
        row = values.copy()
        row[index] += measured.standard
        moved.append(row)
    first, *others = function(np.array(moved)).tolist()
    if math.isnan(first):
        return MISSING
    return Measured(first, math.sqrt(sum((other - first) ** 2 for other in others if not math.isnan(other))))
