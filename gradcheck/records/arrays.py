"""Array types of the package, and how a record freezes the arrays it holds."""

from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]
IntArray: TypeAlias = NDArray[np.intp]
BoolArray: TypeAlias = NDArray[np.bool_]


def frozen(value: Any, dtype: Any = float) -> NDArray[Any]:
    """Own read-only copy of `value` as an array of `dtype`; a record that is handed out never changes."""
    copy = np.array(value, dtype=dtype)
    copy.setflags(write=False)
    return copy
