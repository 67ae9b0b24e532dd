"""The whole chain on open trial data: episodes -> fit -> individual simulation, against a model-free estimate.

The allowed difference is stated per arm below. It is about one bootstrap standard error of the data's own estimate
(0.26 and 0.14: only 5 and 10 patients are followed to day 365), so that the model's misfit is no larger than what the
data leave open, and it is far below the difference between the arms (about 0.85), so that a chain that loses the
treatment or the memory of earlier infections fails; the negative controls show both.
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest
from realdata.cgd_study import FORGETS, mean_cumulative_infections, read_cgd, write_cgd_study

import microsim
from microsim.study.load import load_study

ALLOWED = {"placebo": 0.25, "interferon": 0.125}
PATIENTS = 20_000
SEED = 20261203


@pytest.fixture(scope="module")
def cgd() -> pd.DataFrame:
    return read_cgd()


def simulated_infections(folder: Path) -> dict[str, tuple[float, float]]:
    """Arm -> mean infections per patient by the horizon, and its Monte Carlo standard error."""
    result = microsim.run(load_study(folder), patients=PATIENTS, seed=SEED)
    table = pd.DataFrame(result.tables["outcomes"])
    rows = table[(table["model"] == "individual") & (table["outcome"] == "events:infection")].set_index("strategy")
    return {arm: (float(rows.loc[arm, "mean"]), float(rows.loc[arm, "standard_error"])) for arm in ALLOWED}


def test_the_data_are_the_ones_described(cgd: pd.DataFrame) -> None:
    assert len(cgd) == 203
    assert cgd["infected"].sum() == 76
    assert cgd.groupby("arm")["patient"].nunique().to_dict() == {"placebo": 65, "interferon": 63}
    assert (cgd["exit"] > cgd["entry"]).all()
    assert cgd["earlier"].equals(cgd.groupby("patient").cumcount())


def test_the_mean_cumulative_function_of_complete_follow_up_is_the_plain_mean() -> None:
    rows = [(1, 0, 100, True, 0), (1, 100, 400, False, 1), (2, 0, 400, False, 0)]
    rows += [(3, 0, 50, True, 0), (3, 50, 60, True, 1), (3, 60, 400, False, 2)]
    data = pd.DataFrame(rows, columns=["patient", "entry", "exit", "infected", "earlier"]).assign(arm="placebo")
    assert mean_cumulative_infections(data, arm="placebo").estimate == pytest.approx(1.0, abs=1e-12)


def test_a_patient_who_leaves_early_counts_only_while_followed() -> None:
    rows = [(1, 0, 200, True, 0), (1, 200, 400, False, 1), (2, 0, 100, False, 0)]
    data = pd.DataFrame(rows, columns=["patient", "entry", "exit", "infected", "earlier"]).assign(arm="placebo")
    assert mean_cumulative_infections(data, arm="placebo").estimate == pytest.approx(1.0, abs=1e-12)


def test_simulated_infections_by_one_year_agree_with_the_model_free_estimate(tmp_path: Path, cgd: pd.DataFrame) -> None:
    simulated = simulated_infections(write_cgd_study(tmp_path / "cgd", cgd))
    for arm, (mean, error) in simulated.items():
        data = mean_cumulative_infections(cgd, arm=arm)
        misfit = mean - data.estimate
        report = (
            f"{arm}: simulated {mean:.3f} (Monte Carlo standard error {error:.4f}), data {data.estimate:.3f} "
            f"(bootstrap standard error {data.standard_error:.3f}, 95 % band {data.low:.3f} to {data.high:.3f}), "
            f"misfit {misfit:+.3f}, allowed {ALLOWED[arm]:.3f}"
        )
        assert 0.0 < error < 0.1 * ALLOWED[arm], f"too few patients to judge the misfit. {report}"
        assert abs(misfit) < ALLOWED[arm], report
        assert data.low < mean < data.high, report


def test_the_check_notices_a_simulation_that_forgets_earlier_infections(tmp_path: Path, cgd: pd.DataFrame) -> None:
    mean, _ = simulated_infections(write_cgd_study(tmp_path / "cgd", cgd, ratio=FORGETS))["placebo"]
    assert abs(mean - mean_cumulative_infections(cgd, arm="placebo").estimate) > ALLOWED["placebo"]


def test_the_check_notices_arms_taken_for_each_other(tmp_path: Path, cgd: pd.DataFrame) -> None:
    simulated = simulated_infections(write_cgd_study(tmp_path / "cgd", cgd))
    for arm, other in (("placebo", "interferon"), ("interferon", "placebo")):
        assert abs(simulated[arm][0] - mean_cumulative_infections(cgd, arm=other).estimate) > ALLOWED[other]
