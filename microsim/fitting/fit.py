"""A fitted distribution: estimates, their uncertainty and how the estimation went. Plain data, JSON-able."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from microsim.hazards.core import Hazard

F = npt.NDArray[np.float64]

# Working scale on which estimates are near normal: name and family parameter behind it, in kernel order.
WORKING: dict[str, tuple[tuple[str, str], ...]] = {
    "exponential": (("log_rate", "rate"),),
    "weibull": (("log_shape", "shape"), ("log_scale", "scale")),
    "gompertz": (("shape", "shape"), ("log_rate", "rate")),
    "lognormal": (("meanlog", "meanlog"), ("log_sdlog", "sdlog")),
    "loglogistic": (("log_shape", "shape"), ("log_scale", "scale")),
}


def natural(family: str, working: F) -> dict[str, F]:
    """Family parameters from working values, the last axis of ``working`` (longer ones carry coefficients after them)."""
    return {
        parameter: np.exp(working[..., i]) if name.startswith("log_") else np.asarray(working[..., i])
        for i, (name, parameter) in enumerate(WORKING[family])
    }


@dataclass(frozen=True, slots=True)
class Fit:
    """params: family parameters by name, in the data's time unit; coefficients: log hazard ratios by name.

    working, working_names, covariance: maximum likelihood estimates on the working scale (family, then coefficients) and
    the inverse observed information. n: subjects; person_time: time at risk; both and n_events count rows, unweighted.
    warnings: what a user should know.
    """

    family: str
    params: Mapping[str, float]
    coefficients: Mapping[str, float]
    loglik: float
    working: tuple[float, ...]
    working_names: tuple[str, ...]
    covariance: tuple[tuple[float, ...], ...]
    n: int
    n_events: int
    person_time: float
    converged: bool
    warnings: tuple[str, ...] = ()

    @property
    def aic(self) -> float:
        return 2.0 * len(self.working) - 2.0 * self.loglik

    @property
    def bic(self) -> float:
        """With the number of subjects as sample size."""
        return float(np.log(self.n)) * len(self.working) - 2.0 * self.loglik

    @property
    def hazard(self) -> Hazard:
        """In the data's time unit, for covariates zero."""
        return Hazard(self.family, dict(self.params))

    @property
    def standard_errors(self) -> dict[str, float]:
        """On the working scale."""
        return dict(zip(self.working_names, np.sqrt(np.diag(np.asarray(self.covariance))), strict=True))

    def draw(self, n: int, seed: int) -> dict[str, F]:
        """Multivariate normal draws on the working scale, as natural parameters and coefficients, each float64[n]."""
        rng = np.random.default_rng(seed)
        values = rng.multivariate_normal(
            np.asarray(self.working), np.asarray(self.covariance), size=n, method="cholesky"
        )
        out = natural(self.family, values)
        first = len(WORKING[self.family])
        return out | {name: values[:, first + i] for i, name in enumerate(self.coefficients)}

    def to_dict(self) -> dict[str, Any]:
        return asdict(self)

    @classmethod
    def from_dict(cls, content: Mapping[str, Any]) -> Fit:
        kept = dict(content)
        for key in ("working", "working_names", "warnings"):
            kept[key] = tuple(kept[key])
        kept["covariance"] = tuple(tuple(row) for row in kept["covariance"])
        return cls(**kept)
