"""The shape of a result as this room reads it: tables, summary, fits, pathway and manifest, by attribute name only.

A study's comparison is turned into pages here and nowhere is it recomputed, so these protocols must not name the class
that implements them, an engine, or a study file. A table that is missing or empty simply leaves its section out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt
import pandas as pd

Array = npt.NDArray[np.float64]

# Columns each table must have for its section to be drawn; more are allowed and ignored.
COLUMNS: dict[str, tuple[str, ...]] = {
    "outcomes": ("strategy", "model", "cycle_rule", "outcome", "unit", "mean", "standard_error"),
    "increments": ("strategy", "comparator", "model", "cycle_rule", "outcome", "unit", "mean", "standard_error"),
    "incremental": ("strategy", "model", "cost", "qaly", "status", "icer"),
    "net_benefit": (
        "model", "cycle_rule", "threshold", "strategy", "net_benefit", "standard_error", "increment", "increment_se",
    ),
    "choice": ("model", "threshold", "strategy", "resolved", "lead", "lead_se"),
    "gap": (
        "strategy", "quantity", "threshold", "use", "cycle_rule", "full", "cohort", "memory", "memory_se", "carrying",
        "carrying_se", "cycle", "cycle_se", "total", "total_se",
    ),
    "occupancy": ("strategy", "model", "time", "state", "probability"),
    "rates": (
        "strategy", "use", "clock", "source", "target", "time_from", "time_to", "rate", "events", "exposure",
    ),
    "verdict": ("threshold", "strategy", "gap", "se", "lower", "upper", "tolerance", "verdict", "patients_needed"),
}  # fmt: skip


class CurveLike(Protocol):
    """Arrays of one fitted transition, time in the fit's own unit.

    km_time, km_survival, km_lower, km_upper: float64[k]; fitted_time, fitted_survival: float64[m];
    risk_times, at_risk: float64[r] (counts in at_risk).
    """

    @property
    def km_time(self) -> Array: ...
    @property
    def km_survival(self) -> Array: ...
    @property
    def km_lower(self) -> Array: ...
    @property
    def km_upper(self) -> Array: ...
    @property
    def fitted_time(self) -> Array: ...
    @property
    def fitted_survival(self) -> Array: ...
    @property
    def risk_times(self) -> npt.ArrayLike: ...
    @property
    def at_risk(self) -> npt.ArrayLike: ...


class FitLike(Protocol):
    """What was estimated: family, parameters on the family's own scale, and how well it went."""

    @property
    def family(self) -> str: ...
    @property
    def params(self) -> Mapping[str, float]: ...
    @property
    def coefficients(self) -> Mapping[str, float]: ...
    @property
    def loglik(self) -> float: ...
    @property
    def aic(self) -> float: ...
    @property
    def bic(self) -> float: ...
    @property
    def n(self) -> int: ...
    @property
    def n_events(self) -> int: ...
    @property
    def converged(self) -> bool: ...
    @property
    def warnings(self) -> Sequence[str]: ...


class FittedTransition(Protocol):
    """A fit with the curve it is judged by; ``source`` and ``target`` are state names, ``unit`` the time unit."""

    @property
    def fit(self) -> FitLike: ...
    @property
    def curve(self) -> CurveLike: ...
    @property
    def source(self) -> str: ...
    @property
    def target(self) -> str: ...
    @property
    def unit(self) -> str: ...
    @property
    def label(self) -> str: ...


class NodeLike(Protocol):
    """A state; ``start`` is a flag or the share of patients that begin there."""

    @property
    def name(self) -> str: ...
    @property
    def label(self) -> str: ...
    @property
    def start(self) -> float | bool: ...
    @property
    def absorbing(self) -> bool: ...


class EdgeLike(Protocol):
    """One transition of one clock; ``source`` and ``target`` are state names."""

    @property
    def clock(self) -> str: ...
    @property
    def label(self) -> str: ...
    @property
    def source(self) -> str: ...
    @property
    def target(self) -> str: ...
    @property
    def scale(self) -> str: ...
    @property
    def background(self) -> bool: ...


class GraphLike(Protocol):
    """States and transitions, in the study's order."""

    @property
    def nodes(self) -> Sequence[NodeLike]: ...
    @property
    def edges(self) -> Sequence[EdgeLike]: ...


class ResultLike(Protocol):
    """One finished comparison.

    tables: name -> frame with at least COLUMNS[name]. summary keys: title, invented, headline, sentences, cautions,
    settings (mapping), currency, time_unit, defaults ([key, value] pairs), warnings, labels ({"strategies", "states",
    "clocks"} -> name -> label). manifest: nested mapping of hashes, versions, seed and timing.
    """

    @property
    def tables(self) -> Mapping[str, pd.DataFrame]: ...
    @property
    def summary(self) -> Mapping[str, Any]: ...
    @property
    def fits(self) -> Mapping[str, FittedTransition]: ...
    @property
    def pathway(self) -> GraphLike | None: ...
    @property
    def manifest(self) -> Mapping[str, Any]: ...


def table(result: ResultLike, name: str) -> pd.DataFrame:
    """The table, or an empty one with its columns. Raises ValueError if a column is missing."""
    frame = result.tables.get(name)
    if frame is None or frame.empty:
        return pd.DataFrame(columns=list(COLUMNS[name]))
    missing = [column for column in COLUMNS[name] if column not in frame.columns]
    if missing:
        raise ValueError(f"table {name!r} lacks column(s) {', '.join(missing)}; a report cannot be laid out without")
    return frame
