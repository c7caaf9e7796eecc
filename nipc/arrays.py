"""Names for the arrays that the package passes around.

Sample axis first, then time, then component, unless a docstring says otherwise; the one exception
is a basis matrix, which is (terms, samples): each polynomial's values lie together in memory.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.floating[Any]]
IntArray = npt.NDArray[np.integer[Any]]
BoolArray = npt.NDArray[np.bool_]
