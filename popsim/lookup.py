"""Covariates of one block of patients, each computed once, when first asked for."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from covariates.catalogue import compute


class Lookup:
    """lookup("bmi") gives the (n,) array of that attribute or covariate; attributes win over equations."""

    def __init__(self, attributes: Mapping[str, np.ndarray]):
        self._attributes = attributes
        self._computed: dict[str, np.ndarray] = {}

    def __call__(self, name: str) -> np.ndarray:
        if name in self._attributes:
            return self._attributes[name]
        if name not in self._computed:
            self._computed[name] = compute(name, self._attributes)
        return self._computed[name]
