"""A nonlinear mixed-effects fit by maximum likelihood of the model made linear at each subject's own estimate.

Source: Lindstrom and Bates 1990, Biometrics 46:673-87 (from memory), the method of R's nlme.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

Predict = Callable[[np.ndarray, int], np.ndarray]
STEP, MOST_ROUNDS, CLOSE = 1e-6, 60, 1e-4
SMALLEST_LOG = -12.0  # of an SD: none


def mixed_fit(predict: Predict, observed: Sequence[np.ndarray], start: Sequence[float],
              varying: Sequence[int]) -> tuple[np.ndarray, np.ndarray, float]:
    """Fixed effects (p,), SDs (q,) of independent random effects on the parameters `varying`, SD of constant error.

    predict   (parameters of one subject (p,), place of the subject) -> its predicted values
    observed  one array a subject
    """
    from scipy.optimize import minimize

    fixed, own, n = np.array(start, dtype=float), np.zeros((len(observed), len(varying))), len(observed)
    logs = np.log(0.3 * np.abs([*fixed[list(varying)], 1.0]))
    for _ in range(MOST_ROUNDS):
        linear = [_linear(predict, observed[i], fixed, own[i], varying, i) for i in range(n)]
        found = minimize(lambda logs: _solved(linear, varying, logs)[0], logs, method="L-BFGS-B",  # noqa: B023
                         bounds=[(SMALLEST_LOG, None)] * len(logs), options={"ftol": 1e-11, "gtol": 1e-6})
        _, fixed_now, own = _solved(linear, varying, found.x)
        moved = max(np.abs(fixed_now - fixed).max(), np.abs(found.x - logs).max())
        fixed, logs = fixed_now, found.x
        if moved < CLOSE:
            break
    return fixed, np.exp(logs[:-1]), float(np.exp(logs[-1]))


def _linear(predict: Predict, observed: np.ndarray, fixed: np.ndarray, own: np.ndarray, varying: Sequence[int],
            i: int) -> tuple[np.ndarray, np.ndarray]:
    """Slopes (k, p), and the observations as the linear model has them (k,)."""
    here = fixed.copy()
    here[list(varying)] += own
    base = predict(here, i)
    slopes = np.stack([(predict(here + STEP * row, i) - predict(here - STEP * row, i)) / (2 * STEP)
                       for row in np.eye(len(fixed))], axis=1)
    return slopes, observed - base + slopes @ here


def _solved(linear: Sequence[tuple[np.ndarray, np.ndarray]], varying: Sequence[int],
            logs: np.ndarray) -> tuple[float, np.ndarray, np.ndarray]:
    """Twice the negative log likelihood (less a constant) at these SDs, the fixed effects, each subject's own."""
    spread, error = np.diag(np.exp(2 * logs[:-1])), np.exp(2 * logs[-1])
    size, weighted, inverses, loss = 0.0, 0.0, [], 0.0
    for slopes, values in linear:
        random = slopes[:, list(varying)]
        covariance = random @ spread @ random.T + error * np.eye(len(values))
        inverses.append(np.linalg.inv(covariance))
        loss += np.linalg.slogdet(covariance)[1]
        size = size + slopes.T @ inverses[-1] @ slopes
        weighted = weighted + slopes.T @ inverses[-1] @ values
    fixed = np.linalg.solve(size, weighted)
    own = []
    for (slopes, values), inverse in zip(linear, inverses, strict=True):
        left = inverse @ (values - slopes @ fixed)
        loss += float((values - slopes @ fixed) @ left)
        own.append(spread @ slopes[:, list(varying)].T @ left)
    return float(loss), fixed, np.array(own)
