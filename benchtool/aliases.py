"""The names of types that every result is made of."""

from __future__ import annotations

from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

__all__ = ["Bound", "ComplexArray", "FloatArray"]

FloatArray: TypeAlias = NDArray[np.float64]
ComplexArray: TypeAlias = NDArray[np.complex128]
Bound: TypeAlias = Literal["at least", "at most"]
