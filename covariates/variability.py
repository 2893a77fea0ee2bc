"""Mathematics of between-subject variability: no drawing, only what printed numbers mean.

A parameter of a person is typical value x exp(eta), eta normal with standard deviation omega. Papers print omega, its
square, or a coefficient of variation; above an omega of about 0.4 these differ enough to matter. Some papers add eta to
the typical value itself, or to the logit of a share.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np


# How a random effect acts on the typical value.
FORMS = ("lognormal", "normal", "normal, relative", "logit-normal")


def with_effect(typical, effect, form):
    """The value of a person: typical value and random effect together.

    Arguments:
        typical: typical value [any unit; a share between 0 and 1 for "logit-normal"], scalar or (n,).
        effect: random effect eta [no unit; the unit of `typical` for "normal"], scalar or (n,).
        form: one of FORMS [text].
    Returns:
        the individual value [unit of typical], (n,); not above 0 where a normal effect is large enough, and NaN for a
        "logit-normal" typical value that is no share: nothing is clipped.
    Raises:
        ValueError: an unknown form.
    Formula: lognormal typical exp(eta); normal typical + eta; normal, relative typical (1 + eta); logit-normal
        p exp(eta) / (1 - p + p exp(eta)), p = typical
    Source: definition of these distributions.

    >>> round(float(with_effect(0.8, 0.5, "logit-normal")), 4)
    0.8683
    """
    if form == "lognormal":
        return typical * np.exp(effect)
    if form == "normal":
        return typical + effect
    if form == "normal, relative":
        return typical * (1.0 + effect)
    if form != "logit-normal":
        raise ValueError(f"form must be one of {', '.join(FORMS)}, found {form!r}")
    odds = np.exp(effect)
    is_share = (np.asarray(typical) > 0) & (np.asarray(typical) < 1)
    return np.where(is_share, typical * odds / (1.0 - typical + typical * odds), np.nan)


def omega_from_cv(cv):
    """Standard deviation of the logarithm from the coefficient of variation of a lognormal quantity.

    Arguments:
        cv: coefficient of variation [fraction: 0.3 for 30 %], scalar or (n,).
    Returns:
        omega [number without unit], same shape.
    Raises:
        ValueError: negative, NaN or infinite.
    Formula: sqrt(ln(1 + CV^2))
    Source: moments of the lognormal distribution.

    >>> round(float(omega_from_cv(0.5)), 4)
    0.4724
    """
    return np.sqrt(np.log1p(np.square(_not_negative("cv", cv))))


def cv_from_omega(omega):
    """Coefficient of variation of a lognormal quantity from the standard deviation of its logarithm.

    Arguments:
        omega: standard deviation of the logarithm [number without unit], scalar or (n,).
    Returns:
        coefficient of variation [fraction], same shape.
    Raises:
        ValueError: negative, NaN or infinite.
    Formula: sqrt(exp(omega^2) - 1)
    Source: moments of the lognormal distribution.

    >>> round(float(cv_from_omega(0.610)), 4)
    0.6714
    """
    return np.sqrt(np.expm1(np.square(_not_negative("omega", omega))))


def omega_from_variance(variance):
    """Standard deviation of the logarithm from its variance.

    Arguments:
        variance: variance of the logarithm, "omega squared" [number without unit], scalar or (n,).
    Returns:
        omega [number without unit], same shape.
    Raises:
        ValueError: negative, NaN or infinite.
    Formula: sqrt(variance)
    Source: definition of the variance.

    >>> float(omega_from_variance(0.25))
    0.5
    """
    return np.sqrt(_not_negative("variance", variance))


def covariance_from(sds: Mapping[str, float], correlations: Mapping[tuple[str, str], float]) -> np.ndarray:
    """Covariance matrix, in the order of `sds`; pairs that are not named are not correlated.

    Arguments:
        sds: name -> standard deviation above 0 [number without unit], k of them.
        correlations: (name, name) -> correlation between -1 and 1 [number without unit], each pair once.
    Returns:
        covariance [number without unit], (k, k).
    Raises:
        ValueError: an SD not above 0, an unknown name, a pair twice or with itself, a correlation outside -1 to 1,
            or correlations that cannot hold together (the matrix is not positive definite).
    Formula: cov(a, b) = r(a, b) sd(a) sd(b)
    Source: definition of the covariance.

    >>> covariance_from({"V1": 0.5, "CL": 0.2}, {("V1", "CL"): 0.5}).round(3).tolist()
    [[0.25, 0.05], [0.05, 0.04]]
    """
    names = list(sds)
    for name, sd in sds.items():
        if not 0 < sd < np.inf:
            raise ValueError(f"the standard deviation of {name} must be above 0 and finite, found {sd}")
    correlation = np.eye(len(names))
    seen: set[frozenset[str]] = set()
    for (first, second), r in correlations.items():
        if unknown := {first, second} - set(names):
            raise ValueError(f"correlation of {first} and {second}: {min(unknown)} has no standard deviation")
        if first == second or frozenset((first, second)) in seen:
            raise ValueError(f"correlation of {first} and {second}: give each pair of two names once")
        if not -1 < r < 1:
            raise ValueError(f"correlation of {first} and {second} must lie between -1 and 1, found {r}")
        seen.add(frozenset((first, second)))
        i, j = names.index(first), names.index(second)
        correlation[i, j] = correlation[j, i] = r
    scale = np.array([sds[name] for name in names], dtype=np.float64)
    covariance = correlation * np.outer(scale, scale)
    cholesky_factor(correlation)  # without the SDs, so that it does not matter how unequal they are
    return covariance


def cholesky_factor(covariance) -> np.ndarray:
    """Lower triangular factor: factor @ z has this covariance when z is standard normal.

    Arguments:
        covariance: symmetric positive definite matrix [number without unit], (k, k).
    Returns:
        lower triangular factor [number without unit], (k, k).
    Raises:
        ValueError: not square, not symmetric or not positive definite.
    Formula: factor @ factor.T = covariance
    Source: Cholesky decomposition, LAPACK through numpy.

    >>> cholesky_factor([[4.0, 2.0], [2.0, 5.0]]).tolist()
    [[2.0, 0.0], [1.0, 2.0]]
    """
    matrix = np.asarray(covariance, dtype=np.float64)
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1]:
        raise ValueError(f"a covariance matrix is square, found shape {matrix.shape}")
    if not np.array_equal(matrix, matrix.T):
        raise ValueError("a covariance matrix is symmetric and holds no NaN; this one is not")
    try:
        return np.linalg.cholesky(matrix)
    except np.linalg.LinAlgError:
        raise ValueError("not positive definite: these correlations cannot hold together") from None


def _not_negative(name: str, given) -> np.ndarray:
    values = np.asarray(given, dtype=np.float64)
    if not np.all(np.isfinite(values) & (values >= 0)):
        raise ValueError(f"{name} must be finite and not negative, found {given}")
    return values
