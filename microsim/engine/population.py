"""Patients' attributes from their laws, by inverse transform of one counter-based uniform per patient and attribute.

Reads only a BoundPopulation and the random numbers, so a patient is the same in every strategy, chunk and engine.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy import special

from microsim import rng
from microsim.engine.draws import draw_uniforms
from microsim.study.bound import BoundArm, BoundPopulation, Law

F = npt.NDArray[np.float64]


def _quantile(law: Law, u: F) -> F:
    p = law.params
    if law.kind == "normal":
        return np.asarray(p["mean"] + p["sd"] * special.ndtri(u))
    if law.kind == "lognormal":
        return np.asarray(np.exp(p["meanlog"] + p["sdlog"] * special.ndtri(u)))
    if law.kind == "gamma":
        return np.asarray(special.gammaincinv(p["shape"], u) / p["rate"])
    if law.kind == "beta":
        return np.asarray(special.betaincinv(p["a"], p["b"], u))
    if law.kind == "uniform":
        return p["low"] + (p["high"] - p["low"]) * u
    if law.kind == "choice":
        edges = np.cumsum([p[f"p{i}"] for i in range(len(p))])[:-1]
        return np.searchsorted(edges, u, side="right").astype(np.float64)
    return np.full_like(u, p["value"])


def _probability(law: Law, x: float) -> float:
    """Distribution function at a truncation bound."""
    p = law.params
    if law.kind == "normal":
        return float(special.ndtr((x - p["mean"]) / p["sd"]))
    if law.kind == "lognormal":
        return float(special.ndtr((np.log(x) - p["meanlog"]) / p["sdlog"])) if x > 0 else 0.0
    if law.kind == "gamma":
        return float(special.gammainc(p["shape"], max(x, 0.0) * p["rate"]))
    if law.kind == "beta":
        return float(special.betainc(p["a"], p["b"], min(max(x, 0.0), 1.0)))
    return float(np.clip((x - p["low"]) / (p["high"] - p["low"]), 0.0, 1.0))


def _draw_attribute(law: Law, u: F) -> F:
    if law.within is None or law.kind in ("choice", "constant"):
        return _quantile(law, u)
    low, high = law.within
    p_low, p_high = _probability(law, low), _probability(law, high)
    return np.clip(_quantile(law, p_low + (p_high - p_low) * u), low, high)


def _uniforms(patients: npt.NDArray[np.int64], *, seed: int, stream: int, draw: int) -> F:
    """``rng.uniforms`` by the compiled generator."""
    out = np.empty(patients.size)
    key = np.uint64(seed & 0xFFFFFFFF), np.uint64(seed >> 32)
    draw_uniforms(*key, patients.astype(np.uint64), np.uint64(stream), np.uint64(draw), out)
    return out


def sample(population: BoundPopulation, patients: npt.NDArray[np.int64], *, seed: int, draw: int = 0) -> F:
    """Attributes of the numbered patients, float64[attribute, patient]; categories as codes."""
    out = np.empty((len(population.attributes), patients.size))
    uniforms = [
        _uniforms(patients, seed=seed, stream=rng.stream_id("attribute", a.name), draw=draw)
        for a in population.attributes
    ]
    if population.correlation is not None:
        normals = np.linalg.cholesky(np.asarray(population.correlation)) @ special.ndtri(np.array(uniforms))
        uniforms = list(np.clip(special.ndtr(normals), 2.0**-53, 1.0 - 2.0**-53))
    chosen = None
    if population.rows:
        u = _uniforms(patients, seed=seed, stream=rng.stream_id("attribute", "row"), draw=draw)
        rows = len(next(iter(population.rows.values())))
        chosen = np.minimum((u * rows).astype(np.int64), rows - 1)
    for i, attribute in enumerate(population.attributes):
        if attribute.law is None:
            assert chosen is not None and population.rows is not None
            out[i] = np.asarray(population.rows[attribute.name])[chosen]
        else:
            out[i] = _draw_attribute(attribute.law, uniforms[i])
    return out


def sample_start(arm: BoundArm, patients: npt.NDArray[np.int64], *, seed: int, draw: int = 0) -> npt.NDArray[np.int64]:
    """Index of each patient's first state, int64[patient]."""
    probabilities = np.array([s.start for s in arm.states])
    certain = np.flatnonzero(probabilities == 1.0)
    if certain.size == 1:
        return np.full(patients.size, certain[0], dtype=np.int64)
    u = _uniforms(patients, seed=seed, stream=rng.stream_id("start", "state"), draw=draw)
    return np.minimum(np.searchsorted(np.cumsum(probabilities), u, side="right"), len(arm.states) - 1).astype(np.int64)
