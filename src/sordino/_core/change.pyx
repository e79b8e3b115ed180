"""Integer changes to the scores of the loud features: what the rows hand to the scores.

A small change lists the features it touches; a large one is only the array of sums.
"""

import numpy as np

from libc.stdint cimport int32_t, int64_t


cdef class ScoreChange:
    """Room for one change over `n_loud` scores, 64-bit if `wide`, else 32-bit."""

    def __cinit__(self, int64_t n_loud, bint wide):
        self.sums = np.zeros(max(n_loud, 1), dtype=np.int64 if wide else np.int32)
        self.touched = np.empty(n_loud // 8 + 64, dtype=np.int32)
        cdef int32_t[::1] touched = self.touched
        cdef char[::1] raw = self.sums.view(np.int8)
        self.view.sums = &raw[0]
        self.view.wide = wide
        self.view.touched = &touched[0]
        self.view.room = touched.shape[0]

    def _check_empty(self):
        """Assert that everything was absorbed."""
        assert not self.sums.any() and self.view.n_touched == 0 and not self.view.dense
