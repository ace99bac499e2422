"""The one place that says how kernel code is compiled.

No fast-maths: results must not depend on how a block was cut, and NaN must stay visible.
"""

from numba import njit

kernel = njit(cache=True, nogil=True, error_model="numpy")
inlined = njit(cache=True, nogil=True, error_model="numpy", inline="always")
