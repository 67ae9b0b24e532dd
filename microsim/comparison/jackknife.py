"""Delete-a-group jackknife for groups of any sizes: standard errors of anything computed from all patients."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import stdtrit

F = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Jackknife:
    """sizes: int64[g] patients per group. Values come as float64[1 + g, ...]: all patients first, then without each group."""

    sizes: npt.NDArray[np.int64]

    def variance(self, values: F) -> F:
        """Weighted jackknife variance float64[...] (Busing, Meijer and van der Leeden 1999, eq. 6-8)."""
        groups = self.sizes.size
        h = (self.sizes.sum() / self.sizes).reshape(-1, *([1] * (values.ndim - 1)))
        whole, without = values[0], values[1:]
        pseudo = h * whole - (h - 1.0) * without
        centre = groups * whole - np.sum((1.0 - 1.0 / h) * without, axis=0)
        return np.asarray(np.sum((pseudo - centre) ** 2 / (h - 1.0), axis=0) / groups)

    def standard_error(self, values: F) -> F:
        return np.sqrt(self.variance(values))

    def quantile(self, probability: float) -> float:
        """Student t quantile with one degree of freedom less than groups."""
        return float(stdtrit(self.sizes.size - 1, probability))
