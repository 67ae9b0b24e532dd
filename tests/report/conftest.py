"""A made-up result with the shape of a real one: 3 states, 2 strategies, 2 thresholds. No number is evidence."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest

STATES = ("Home", "Hospital", "Dead")
STRATEGIES = ("usual_care", "nurse_led")
MODELS = (
    ("individual", ""),
    *(
        (f"memoryless {use}", rule)
        for use in ("own", "carried")
        for rule in ("continuous", "none", "half-cycle", "simpson")
    ),
)
THRESHOLDS = (20_000.0, 35_000.0)
OUTCOMES = {
    "ly": ("year", 9.412, 0.031),
    "ly_disc": ("year", 7.018, 0.019),
    "qaly": ("QALY", 6.871, 0.023),
    "qaly_disc": ("QALY", 5.212, 0.014),
    "cost": ("EUR 2026", 61_240.0, 312.0),
    "cost_disc": ("EUR 2026", 47_830.0, 221.0),
    "cost:bed": ("EUR 2026", 38_410.0, 290.0),
    "cost_disc:bed": ("EUR 2026", 29_930.0, 205.0),
    "cost:care": ("EUR 2026", 22_830.0, 74.0),
    "cost_disc:care": ("EUR 2026", 17_900.0, 49.0),
    "time:Home": ("year", 9.187, 0.030),
    "time:Hospital": ("year", 0.225, 0.0018),
    "time:Dead": ("year", 30.588, 0.031),
    "entries:Home": ("count", 7.91, 0.058),
    "entries:Hospital": ("count", 8.42, 0.061),
    "entries:Dead": ("count", 0.9987, 0.0003),
    "events:readmission": ("count", 8.42, 0.061),
    "events:discharge": ("count", 7.91, 0.058),
    "events:background": ("count", 0.61, 0.0041),
}


@dataclass(frozen=True)
class Node:
    name: str
    label: str
    start: float | bool
    absorbing: bool


@dataclass(frozen=True)
class Edge:
    clock: str
    label: str
    source: str
    target: str
    scale: str
    background: bool = False


@dataclass(frozen=True)
class Graph:
    nodes: tuple[Node, ...]
    edges: tuple[Edge, ...]


@dataclass(frozen=True)
class Fit:
    family: str
    params: dict[str, float]
    coefficients: dict[str, float]
    loglik: float = -2211.37
    aic: float = 4430.74
    bic: float = 4449.02
    n: int = 812
    n_events: int = 455
    converged: bool = True
    warnings: tuple[str, ...] = ()
    hazard: Any = None


@dataclass(frozen=True)
class Curve:
    km_time: npt.NDArray[np.float64]
    km_survival: npt.NDArray[np.float64]
    km_lower: npt.NDArray[np.float64]
    km_upper: npt.NDArray[np.float64]
    fitted_time: npt.NDArray[np.float64]
    fitted_survival: npt.NDArray[np.float64]
    risk_times: npt.NDArray[np.float64]
    at_risk: npt.NDArray[np.int64]


@dataclass(frozen=True)
class Fitted:
    fit: Fit
    curve: Curve
    source: str
    target: str
    unit: str
    label: str


@dataclass
class Result:
    tables: dict[str, pd.DataFrame]
    summary: dict[str, Any]
    fits: dict[str, Fitted] = field(default_factory=dict)
    pathway: Graph | None = None
    manifest: dict[str, Any] = field(default_factory=dict)


def make_curve(*, shape: float, scale: float, last: float, n: int, seed: int = 3) -> Curve:
    """A Kaplan-Meier-like staircase around a Weibull survivor function."""
    rng = np.random.default_rng(seed)
    stays = np.sort(scale * rng.weibull(shape, n))
    stays = stays[stays <= last]
    survival = 1 - np.arange(1, stays.size + 1) / n
    spread = 1.96 * np.sqrt(survival * (1 - survival) / n)
    fitted = np.r_[0.0, np.geomspace(0.01 * scale, 1.25 * last, 120)]
    risk = np.linspace(0.0, last, 7) if shape > 0.6 else np.geomspace(stays[0], last, 7)
    return Curve(
        km_time=np.r_[0.0, stays],
        km_survival=np.r_[1.0, survival],
        km_lower=np.r_[1.0, np.clip(survival - spread, 0, 1)],
        km_upper=np.r_[1.0, np.clip(survival + spread, 0, 1)],
        fitted_time=fitted,
        fitted_survival=np.exp(-((fitted / scale) ** shape)),
        risk_times=risk,
        at_risk=np.array([n - int((stays < t).sum()) for t in risk]),
    )


def make_graph() -> Graph:
    return Graph(
        (
            Node("Home", "At home", True, False),
            Node("Hospital", "In hospital", False, False),
            Node("Dead", "Dead", False, True),
        ),
        (
            Edge("readmission", "Readmission", "Home", "Hospital", "sojourn"),
            Edge("discharge", "Discharge", "Hospital", "Home", "sojourn"),
            Edge("death_home", "Cardiac death", "Home", "Dead", "elapsed"),
            Edge("death_hospital", "Death in hospital", "Hospital", "Dead", "sojourn"),
            Edge("background", "Other death", "Home", "Dead", "age", True),
            Edge("background", "Other death", "Hospital", "Dead", "age", True),
        ),
    )


def _factor(model: str, strategy: str) -> float:
    base = 1.0 if strategy == "usual_care" else 1.045
    return base * {"individual": 1.0, "memoryless own": 0.997, "memoryless carried": 0.982}[model]


def _outcomes() -> pd.DataFrame:
    shift = {"": 0.0, "continuous": 0.0, "none": -0.004, "half-cycle": 0.0003, "simpson": 0.0001}
    return pd.DataFrame(
        {
            "strategy": s,
            "model": m,
            "cycle_rule": q,
            "outcome": o,
            "unit": u,
            "mean": mean * (_factor(m, s) + shift[q]),
            "standard_error": se * (1.0 if m == "individual" else 0.8),
        }
        for s in STRATEGIES
        for m, q in MODELS
        for o, (u, mean, se) in OUTCOMES.items()
    )


def _increments(outcomes: pd.DataFrame) -> pd.DataFrame:
    keys = ["model", "cycle_rule", "outcome", "unit"]
    both = [outcomes[outcomes["strategy"] == s].set_index(keys)["mean"] for s in STRATEGIES]
    frame = (both[1] - both[0]).reset_index()
    frame["standard_error"] = 0.02 * frame["mean"].abs()
    return frame.assign(strategy="nurse_led", comparator="usual_care")


def _net_benefit() -> pd.DataFrame:
    lead = {
        "individual": (1_870.0, 5_230.0),
        "memoryless own": (1_790.0, 5_060.0),
        "memoryless carried": (-310.0, 1_480.0),
    }
    return pd.DataFrame(
        {
            "model": m,
            "cycle_rule": q,
            "threshold": t,
            "strategy": s,
            "net_benefit": 5.2 * t - 47_830 + by,
            "standard_error": 180.0 + t / 200,
            "increment": by,
            "increment_se": 0.0 if not by else 96.0 + t / 500,
        }
        for m, q in MODELS
        for k, t in enumerate(THRESHOLDS)
        for s, by in zip(STRATEGIES, (0.0, lead[m][k]), strict=True)
    )


def _gap() -> pd.DataFrame:
    rows = []
    full = {
        "net_benefit": ((20_000.0, 1_870.0), (35_000.0, 5_230.0)),
        "qaly_disc": ((np.nan, 0.2345),),
        "cost_disc": ((np.nan, 2152.0),),
    }
    for use in ("own", "carried"):
        for rule in ("continuous", "none", "half-cycle", "simpson"):
            for quantity, values in full.items():
                for threshold, value in values:
                    memory = 0.035 * value
                    carrying = (
                        0.0 if use == "own" else value - memory - (-0.166 * value if value < 2_000 else 0.283 * value)
                    )
                    cycle = (
                        0.0
                        if rule == "continuous"
                        else {"none": 0.06, "half-cycle": -0.004, "simpson": 0.001}[rule] * value
                    )
                    total = memory + carrying + cycle
                    rows.append(
                        {
                            "strategy": "nurse_led",
                            "quantity": quantity,
                            "threshold": threshold,
                            "use": use,
                            "cycle_rule": rule,
                            "full": value,
                            "cohort": value - total,
                            "memory": memory,
                            "memory_se": 0.012 * value,
                            "carrying": carrying,
                            "carrying_se": 0.0 if use == "own" else 0.018 * value,
                            "cycle": cycle,
                            "cycle_se": 0.0004 * value,
                            "total": total,
                            "total_se": 0.021 * value,
                            "memory_by_construction": False,
                            "carrying_by_construction": use == "own",
                            "cycle_by_construction": rule == "continuous",
                            "total_by_construction": False,
                        }
                    )
    return pd.DataFrame(rows)


def _occupancy() -> pd.DataFrame:
    rows = []
    time = np.linspace(0, 40, 161)
    for strategy in STRATEGIES:
        for model in ("individual", "memoryless own", "memoryless carried"):
            if strategy == "usual_care" and model == "memoryless carried":
                continue
            rate = {"individual": 0.1, "memoryless own": 0.103, "memoryless carried": 0.11}[model] / _factor(
                model, strategy
            )
            alive = np.exp(-rate * time - 0.0011 * time**2)
            hospital = alive * (0.024 + 0.03 * np.exp(-time / (1.5 if model == "individual" else 3.0)) * (time > 0))
            for state, p in zip(STATES, (alive - hospital, hospital, 1 - alive), strict=True):
                rows.append(
                    pd.DataFrame({"strategy": strategy, "model": model, "time": time, "state": state, "probability": p})
                )
    return pd.concat(rows, ignore_index=True)


def _rates() -> pd.DataFrame:
    rows = []
    arcs = (
        ("readmission", "Home", "Hospital", 0.91),
        ("discharge", "Hospital", "Home", 38.2),
        ("death_hospital", "Hospital", "Dead", 1.7),
    )
    for strategy, use in (("usual_care", "own"), ("nurse_led", "own"), ("nurse_led", "carried")):
        by = {"usual_care": 1.0, "nurse_led": 0.83}[strategy] * (0.95 if use == "carried" else 1.0)
        for clock, source, target, rate in arcs:
            rows.append((strategy, use, clock, source, target, 0.0, 40.0, rate * by, 41_200.0 * by, 45_275.0))
        for source in ("Home", "Hospital"):
            for year in range(40):
                rows.append(
                    (
                        strategy,
                        use,
                        "background",
                        source,
                        "Dead",
                        year,
                        year + 1.0,
                        0.018 * 1.09**year * by,
                        300.0,
                        12_000.0 / (year + 1),
                    )
                )
    columns = ["strategy", "use", "clock", "source", "target", "time_from", "time_to", "rate", "events", "exposure"]
    return pd.DataFrame(rows, columns=columns)


def make_tables() -> dict[str, pd.DataFrame]:
    outcomes = _outcomes()
    money = {m: (47_830.0 * _factor(m, "usual_care"), 47_830.0 * _factor(m, "nurse_led")) for m in dict(MODELS)}
    icer = {"individual": 11_530.0, "memoryless own": 11_920.0, "memoryless carried": 22_410.0}
    incremental = [
        {
            "strategy": s,
            "model": m,
            "cost": money[m][k],
            "qaly": 5.212 * _factor(m, s),
            "status": ("reference", "on the frontier")[k],
            "icer": (np.nan, icer[m])[k],
        }
        for m in dict(MODELS)
        for k, s in enumerate(STRATEGIES)
    ]
    choice = [
        ("individual", 20_000.0, "nurse_led", True, 1_870.0, 136.0),
        ("individual", 35_000.0, "nurse_led", True, 5_230.0, 166.0),
        ("memoryless own", 20_000.0, "nurse_led", True, 1_790.0, 120.0),
        ("memoryless own", 35_000.0, "nurse_led", True, 5_060.0, 150.0),
        ("memoryless carried", 20_000.0, "usual_care", False, 310.0, 170.0),
        ("memoryless carried", 35_000.0, "nurse_led", True, 1_480.0, 190.0),
    ]
    verdict = [
        (20_000.0, "nurse_led", 2_187.0, 39.0, 2_109.0, 2_265.0, 250.0, "not adequate", np.nan),
        (35_000.0, "nurse_led", 201.0, 110.0, -20.0, 422.0, 261.5, "unresolved", 182_000.0),
    ]
    return {
        "outcomes": outcomes,
        "increments": _increments(outcomes),
        "incremental": pd.DataFrame(incremental),
        "net_benefit": _net_benefit(),
        "gap": _gap(),
        "occupancy": _occupancy(),
        "rates": _rates(),
        "choice": pd.DataFrame(choice, columns=["model", "threshold", "strategy", "resolved", "lead", "lead_se"]),
        "verdict": pd.DataFrame(
            verdict,
            columns=["threshold", "strategy", "gap", "se", "lower", "upper", "tolerance", "verdict", "patients_needed"],
        ),
    }


def make_summary() -> dict[str, Any]:
    return {
        "title": "Nurse-led follow-up after an admission for heart failure",
        "invented": True,
        "headline": "not adequate",
        "sentences": [
            "At 20,000 EUR per QALY the memoryless cohort with carried rates understates the incremental net "
            "benefit of nurse-led follow-up by 2,187 (SE 39), nine times what the study tolerates.",
            "It would keep usual care where the individual-level model adopts nurse-led follow-up.",
        ],
        "cautions": ["Rates beyond year 31 rest on fewer than 200 patients at risk."],
        "settings": {
            "patients": 50_000,
            "seed": 20261201,
            "horizon": "40 years",
            "correction": "half-cycle",
            "cycle": "1 month",
        },
        "currency": "EUR 2026",
        "time_unit": "year",
        "defaults": [
            ["cohort.correction", "half-cycle"],
            ["discounting.method", "continuous"],
            ["states.Dead.utility", 0.0],
        ],
        "labels": {
            "strategies": {"usual_care": "Usual care", "nurse_led": "Nurse-led follow-up"},
            "states": {"Home": "At home", "Hospital": "In hospital", "Dead": "Dead"},
            "clocks": {
                "readmission": "Readmission",
                "discharge": "Discharge",
                "background": "Other death",
                "death_hospital": "Death in hospital",
            },
        },
    }


def make_result() -> Result:
    fits = {
        "home_stay": Fitted(
            Fit(
                "weibull",
                {"shape": 0.52, "scale": 420.0},
                {"b_admission": 0.21},
                warnings=("Shape below 1: the hazard starts at infinity.",),
            ),
            make_curve(shape=0.52, scale=420.0, last=2_900.0, n=812),
            "Home",
            "Hospital",
            "day",
            "Stay at home",
        ),
        "bed_stay": Fitted(
            Fit("lognormal", {"meanlog": 2.05, "sdlog": 0.71}, {}),
            make_curve(shape=1.4, scale=9.5, last=32.0, n=455, seed=5),
            "Hospital",
            "Home",
            "day",
            "Stay in hospital",
        ),
    }
    manifest = {
        "study": {"name": "heart_failure", "hash": "9b1f6c0a7e4d"},
        "seed": 20261201,
        "versions": {"microsim": "0.1.0", "numpy": "2.4.0"},
        "timing": {"simulation_seconds": 3.21, "cohorts_seconds": 0.44},
    }
    return Result(make_tables(), make_summary(), fits, make_graph(), manifest)


@pytest.fixture
def result() -> Result:
    return make_result()
