"""What the frozen records share: arrays in them cannot be written to."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def read_only(values: Any) -> FloatArray:
    """Return `values` as a float64 array that refuses to be written to.

    An array that already is float64 is viewed, not copied.
    """
    array: FloatArray = np.asarray(values, dtype=np.float64).view()
    array.flags.writeable = False
    return array
