"""Who the patients are: attributes and first state from a BoundPopulation and the shared random numbers.

Inverse transform by SciPy's distributions, one uniform per patient and attribute. Knows nothing of clocks or rewards.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import stats

from microsim import rng
from microsim.study.bound import BoundArm, BoundPopulation, Law

F = npt.NDArray[np.float64]


def _distribution(law: Law) -> Any:
    """The frozen SciPy distribution of a continuous law."""
    p = law.params
    match law.kind:
        case "normal":
            return stats.norm(loc=p["mean"], scale=p["sd"])
        case "lognormal":
            return stats.lognorm(s=p["sdlog"], scale=np.exp(p["meanlog"]))
        case "gamma":
            return stats.gamma(a=p["shape"], scale=1.0 / p["rate"])
        case "beta":
            return stats.beta(a=p["a"], b=p["b"])
    return stats.uniform(loc=p["low"], scale=p["high"] - p["low"])


def _values(law: Law, u: F) -> F:
    """The law's quantile at u, float64[patient]; a truncated law reads u on [F(low), F(high)]."""
    if law.kind == "constant":
        return np.full(u.size, law.params["value"])
    if law.kind == "choice":
        probabilities = [law.params[f"p{code}"] for code in range(len(law.params))]
        return np.searchsorted(np.cumsum(probabilities)[:-1], u, side="right").astype(np.float64)
    distribution = _distribution(law)
    if law.within is not None:
        low, high = distribution.cdf(law.within)
        u = low + (high - low) * u
    return np.asarray(distribution.ppf(u))


def _joined(uniforms: F, correlation: Sequence[Sequence[float]]) -> F:
    """Gaussian copula: independent uniforms float64[attribute, patient] become correlated ones."""
    normals = np.linalg.cholesky(np.asarray(correlation)) @ stats.norm.ppf(uniforms)
    return np.asarray(stats.norm.cdf(normals))


def sample_attributes(population: BoundPopulation, patients: Sequence[int], *, seed: int, draw: int) -> dict[str, F]:
    """Attribute name -> float64[patient]; categories as codes, age in years at start."""

    def uniforms(name: str) -> F:
        return rng.uniforms(np.asarray(patients), seed=seed, stream=rng.stream_id("attribute", name), draw=draw)

    names = [a.name for a in population.attributes]
    own = np.array([uniforms(name) for name in names])
    if population.correlation is not None:
        own = _joined(own, population.correlation)
    rows = population.rows or {}
    out = {}
    for attribute, u in zip(population.attributes, own, strict=True):
        if attribute.law is not None:
            out[attribute.name] = _values(attribute.law, u)
        else:
            column = np.asarray(rows[attribute.name], dtype=np.float64)
            out[attribute.name] = column[np.floor(uniforms("row") * column.size).astype(np.int64)]
    return out


def sample_start(arm: BoundArm, patients: Sequence[int], *, seed: int, draw: int) -> list[str]:
    """Name of each patient's first state."""
    for state in arm.states:
        if state.start == 1.0:
            return [state.name] * len(patients)
    u = rng.uniforms(np.asarray(patients), seed=seed, stream=rng.stream_id("start", "state"), draw=draw)
    reached = np.cumsum([s.start for s in arm.states])
    chosen = np.searchsorted(reached[:-1], u, side="right")
    return [arm.states[i].name for i in chosen]
