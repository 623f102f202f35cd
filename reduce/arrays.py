"""Names for the array types that the records hold."""

from __future__ import annotations

from typing import Any, TypeAlias

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

Real: TypeAlias = NDArray[np.float64]
Complex: TypeAlias = NDArray[np.complex128]
Ints: TypeAlias = NDArray[np.int64]
Sparse: TypeAlias = Any  # scipy.sparse.csr_array; scipy ships no types

#: Up to this many unknowns (or states) a dense n by n array is made without asking: 72 MB each.
DENSE_LIMIT = 3000


def frozen(array: NDArray[Any]) -> NDArray[Any]:
    """Return the array, read-only. Records between stages never change; a caller's own array is copied first."""
    if array.flags.writeable:
        array = array.copy()
        array.flags.writeable = False
    return array


def as_csr(matrix: Any) -> Sparse:
    """Return ``matrix`` as a float64 CSR array with summed duplicates and sorted indices."""
    out = sp.csr_array(matrix, dtype=np.float64)
    if not out.has_canonical_format:
        out = out.copy()  # the arrays may be shared with the caller's matrix
        out.sum_duplicates()
    return out
