"""The two example studies: they load and bind, say they are invented, and get the verdicts their READMEs promise."""

from __future__ import annotations

import csv
import math
import shutil
import subprocess
import sys
from collections import defaultdict
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import pytest

import microsim
from microsim.hazards.core import Hazard
from microsim.study.bind import bind
from microsim.study.load import load_study

SCENARIOS = Path(__file__).parents[2] / "scenarios"
NAMES = ("heart_failure", "steady")


@dataclass(frozen=True)
class GivenFit:
    """Numbers that stand in for a fit, in study time units (years)."""

    hazard: Hazard
    coefficients: Mapping[str, float] = field(default_factory=dict)


FITS = {
    "heart_failure": {
        "home_stay": GivenFit(Hazard("weibull", {"shape": 0.65, "scale": 2.0}), {"b_admission": 0.12}),
        "hospital_stay": GivenFit(Hazard("lognormal", {"meanlog": math.log(8.0 / 365.25), "sdlog": 0.7})),
    },
    "steady": {},
}


def rows_of(name: str, file: str) -> list[dict[str, str]]:
    with (SCENARIOS / name / file).open(encoding="utf-8", newline="") as f:
        return list(csv.DictReader(f))


@pytest.mark.parametrize("name", NAMES)
def test_a_scenario_loads_and_binds_without_a_warning(name: str) -> None:
    study = load_study(SCENARIOS / name)
    assert not study.warnings
    bound = bind(study, FITS[name])
    assert [s.name for s in bound.arms[0].states if s.absorbing] == ["Dead"]
    assert len(bound.arms) == 2
    assert bound.decision.thresholds == (20_000, 35_000)


@pytest.mark.parametrize("name", NAMES)
def test_a_scenario_says_everywhere_that_it_is_invented(name: str) -> None:
    bound = bind(load_study(SCENARIOS / name), FITS[name])
    assert bound.invented
    assert "invented" in bound.title.casefold()
    assert {r["source"] for r in rows_of(name, "inputs.csv")} == {"invented"}
    readme = (SCENARIOS / name / "README.md").read_text(encoding="utf-8")
    assert "invented" in readme.splitlines()[0]


@pytest.mark.parametrize("name", NAMES)
def test_yearly_mortality_rises_exponentially_with_age(name: str) -> None:
    table = rows_of(name, "data/lifetable.csv")
    for sex, slope in (("female", 0.0985), ("male", 0.0945)):
        rates = {int(r["age"]): -math.log1p(-float(r[sex])) for r in table}
        # Five decimals: half a unit in the last place is 0.2 % of 0.00275, the smallest value from age 50; over ten
        # years of age is 0.0002 a year.
        for age in range(50, 101, 10):
            assert math.log(rates[age + 10] / rates[age]) / 10.0 == pytest.approx(slope, abs=0.0002)


def test_the_script_writes_the_committed_episodes_and_life_table_byte_for_byte(tmp_path: Path) -> None:
    source = SCENARIOS / "heart_failure"
    script = shutil.copy(source / "make_episodes.py", tmp_path)
    subprocess.run([sys.executable, "-W", "error", script], check=True, cwd=tmp_path, timeout=60)
    for file in ("episodes.csv", "lifetable.csv"):
        assert (tmp_path / "data" / file).read_bytes() == (source / "data" / file).read_bytes(), file


def test_the_episodes_of_a_patient_follow_each_other_and_count_earlier_readmissions() -> None:
    patients: dict[str, list[dict[str, str]]] = defaultdict(list)
    for row in rows_of("heart_failure", "data/episodes.csv"):
        patients[row["patient"]].append(row)
    assert len(patients) == 600
    for rows in patients.values():
        at, state, readmissions = "0.00", "Home", 0
        for row in rows:
            assert (row["entry"], row["from"], int(row["prior"])) == (at, state, readmissions)
            assert float(row["exit"]) > float(row["entry"])
            at, state = row["exit"], row["to"]
            readmissions += row["from"] == "Hospital"
        assert state in ("Dead", "censored")


def test_follow_up_ends_by_plan_by_loss_and_by_death() -> None:
    ends = {r["patient"]: r for r in rows_of("heart_failure", "data/episodes.csv")}
    days = {p: float(r["exit"]) for p, r in ends.items()}
    censored = [p for p, r in ends.items() if r["to"] == "censored"]
    lost_early = [p for p in censored if days[p] < 2.0 * 365.25]
    assert max(days.values()) <= 5.0 * 365.25 + 0.01
    assert 20 <= len(lost_early) <= 100
    assert 0.25 < len(censored) / 600 < 0.75


def verdicts(name: str, *, patients: int) -> set[str]:
    """What is said of the memoryless cohort at the thresholds."""
    result = microsim.run(load_study(SCENARIOS / name), patients=patients, seed=20261204)
    return {row["verdict"] for row in result.summary["verdict"]}


def test_the_memoryless_cohort_is_not_adequate_for_heart_failure() -> None:
    assert "not adequate" in verdicts("heart_failure", patients=10_000)


def test_the_memoryless_cohort_is_adequate_for_the_steady_study() -> None:
    assert verdicts("steady", patients=5_000) == {"adequate"}
