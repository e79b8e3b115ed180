"""How the known noise of corrections spreads into what they correct: linear error propagation.

A correction takes values v to v - A g, where A is public and g is a gradient with noise of known
variance s, alike and independent in every coordinate. Where gradients have slope H, deviations
from what would come of it without noise follow d <- (1 - A H) d - A e, and their covariance
C <- (1 - A H) C (1 - A H)' + s A A'.

The noise in A itself, from second moments, is left out: it counts for little once corrections have
settled. So is sampling error.
"""

from __future__ import annotations

from collections import deque

import numpy as np

FADING = 0.6                # what is known of the slope weighs so much less a correction later
DOUBT = 0.5                 # standard deviation of the slope's share before anything is known
LEAST_SHARE = 0.1


class Deviations:
    """The covariance of values that are corrected, and of the mean of the last of them.

    variance  of the first value, the only one at the start
    averaged  how many corrections that mean goes over
    """

    def __init__(self, variance: float, averaged: int):
        self.covariance = np.array([[float(variance)]])
        self.last: deque[tuple[np.ndarray, np.ndarray]] = deque(maxlen=averaged)
        self.slope = _SlopeShare()

    def include(self):
        """One more value, of no deviation yet."""
        self.covariance = np.pad(self.covariance, (0, 1))

    def correct(self, gain: np.ndarray, slope: np.ndarray, gradient: np.ndarray, variance: float):
        """Values v became v - gain @ gradient, the noise having this variance.

        slope  the most that the gradient's can be; its true share of that is learned
        """
        share = self.slope.learned(gradient, variance)
        promised = gain @ slope
        kept = np.eye(len(gain)) - share * promised
        self.covariance = kept @ self.covariance @ kept.T + variance * gain @ gain.T
        self.last.append((kept, self.covariance))
        self.slope.expect(gradient, -promised.T @ gradient, variance * np.trace(promised))

    def of_mean(self) -> np.ndarray:
        """float64 (values,): standard deviations of the mean of the last corrections.

        Corrections s < t have the cross-covariance C_s (1 - A_s+1 H_s+1)' ... (1 - A_t H_t)'.
        """
        total = mixed = np.zeros_like(self.covariance)  # of the sum; of the sum with its last term
        for kept, covariance in self.last:
            mixed = mixed @ kept.T + covariance
            total = total + mixed + mixed.T - covariance
        return np.sqrt(np.diag(total)) / len(self.last)


class _SlopeShare:
    """How the gradient's slope compares with the one that corrections suppose: as a share of it.

    A correction supposes that it changes the gradient by u; the next gradient shows the change y.
    Both are public. The share is the regression of y on u (a secant estimate), with a normal prior
    around 1; late corrections count for more, as slopes change while a model grows.
    """

    def __init__(self):
        self.moments = np.zeros(2)          # of u with y and with itself, over the variance of y
        self.expected = None

    def expect(self, gradient: np.ndarray, change: np.ndarray, shared: float):
        """The change supposed; `shared`: the noise that u and y have in common, in the mean of u'y.

        u = -(A H)' g and y = g_next - g, so that is s tr(A H).
        """
        self.expected = gradient, change, shared

    def learned(self, gradient: np.ndarray, variance: float) -> float:
        """The share, now that the gradient after the last correction is known."""
        if self.expected is not None:
            before, change, shared = self.expected
            seen = gradient[: len(before)] - before
            moments = np.array([change @ seen - shared, change @ change]) / (2 * variance)
            self.moments = FADING * self.moments + moments
        with_seen, with_itself = self.moments + DOUBT**-2
        return min(max(with_seen / with_itself, LEAST_SHARE), 1.0)
