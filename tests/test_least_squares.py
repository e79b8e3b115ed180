"""Against an outside reference: least squares, reached where noise is negligible.

Source of the optimum: LinearRegression of scikit-learn. Data: diabetes (442 x 10), which
scikit-learn ships.
"""

from __future__ import annotations

import numpy as np
from sklearn.datasets import load_diabetes
from sklearn.linear_model import LinearRegression

import sordino

NO_NOISE = sordino.Guarantee(epsilon=1e9, delta=1e-6)


def test_greedy_agrees_with_ordinary_least_squares_as_noise_vanishes():
    """All features picked; residuals are clipped at two half ranges, further than any goes, and
    bounds are so wide that no row is longer than the clipping norm.

    What is left is how far corrections still have to go after the planned four, and rounding: 0.1 %
    of the label's standard deviation, and of the largest coefficient 0.25 %, doubled here.
    """
    X, y = load_diabetes(return_X_y=True)
    bound = abs(X).max(axis=0)
    bound *= np.linalg.norm(X / bound, axis=1).max() / np.sqrt(2.99)
    facts = sordino.PublicFacts(features=10, rows=442, entry_bound=bound, label=(25.0, 346.0))
    plan = sordino.plan_fit(facts, NO_NOISE, method="greedy", loss="squared", picks=10,
                            residual_bound=2.0)
    assert np.hypot(1, np.linalg.norm(X / bound, axis=1)).max() < plan.norm
    release = plan.fit(X, y, rehearsal_seed=1)
    best = LinearRegression().fit(X, y)
    assert abs(y - best.predict(X)).max() < plan.loss_form.unit
    assert abs(release.predict(X) - best.predict(X)).max() < 0.002 * y.std()
    assert abs(release.coefficients - best.coef_).max() < 0.005 * abs(best.coef_).max()
