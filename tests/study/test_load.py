"""A study folder becomes a Study: content, hash, defaults, warnings, units."""

from __future__ import annotations

import pickle
import shutil
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import ClassVar

import pytest
from study_builder import STUDY, changed, episodes, study_text, write_study

from microsim.hazards.core import Hazard
from microsim.study.bind import bind
from microsim.study.load import load_study
from microsim.study.parts import Study

Loader = Callable[..., Study]


def test_a_study_loads_from_its_folder_and_from_its_file(tmp_path: Path) -> None:
    folder = write_study(tmp_path / "study")
    assert load_study(folder).content_hash == load_study(str(folder / "study.toml")).content_hash
    assert load_study(folder).folder == "study"


def test_the_hash_does_not_depend_on_place_or_line_ends(tmp_path: Path) -> None:
    folder = write_study(tmp_path / "a")
    other = tmp_path / "deep" / "b"
    shutil.copytree(folder, other)
    for f in other.iterdir():
        f.write_bytes(b"\xef\xbb\xbf" + f.read_bytes().replace(b"\n", b"\r\n"))
    first, second = load_study(folder), load_study(other)
    assert first.content_hash == second.content_hash
    assert len(first.content_hash) == 64
    assert first.fits[0].task is not None and second.fits[0].task is not None
    assert first.fits[0].task.content_hash == second.fits[0].task.content_hash


@pytest.mark.parametrize("name", ["study.toml", "inputs.csv", "lifetable.csv", "episodes.csv"])
def test_the_hash_changes_with_every_file_used(name: str, tmp_path: Path) -> None:
    folder = write_study(tmp_path / "study")
    before = load_study(folder).content_hash
    text = (folder / name).read_text()
    changes = {"study.toml": ("horizon = 10", "horizon = 11"), "inputs.csv": ("1500", "1501"),
               "lifetable.csv": ("40,0.000800", "40,0.000801"), "episodes.csv": ("0,Home", "00,Home")}  # fmt: skip
    assert changes[name][0] in text
    (folder / name).write_text(text.replace(*changes[name], 1))
    assert load_study(folder).content_hash != before


def test_the_hash_ignores_files_not_used(tmp_path: Path) -> None:
    folder = write_study(tmp_path / "study")
    before = load_study(folder).content_hash
    (folder / "notes.csv").write_text("x\n1\n")
    assert load_study(folder).content_hash == before


def test_nothing_of_the_machine_is_kept_and_nothing_is_written(tmp_path: Path) -> None:
    folder = write_study(tmp_path / "study")
    before = sorted(p.name for p in folder.iterdir())
    study = load_study(folder)
    assert str(tmp_path) not in repr(study)
    assert sorted(p.name for p in folder.iterdir()) == before


def test_what_was_not_said_is_told_with_the_value_taken(load: Loader) -> None:
    defaults = dict(load(study={"run": None, "discounting": None, "decision.comparator": None}).defaults)
    assert defaults["decision.comparator"] == "usual_care"
    assert defaults["cohort.cycle"] == "1 month"
    assert defaults["discounting.costs"] == "0.0"
    assert defaults["run.patients"] == "50000"
    assert defaults["clocks.background.background"] == "true"
    assert defaults["clocks.readmission.background"] == "false"
    assert defaults["states.Dead.utility"] == "0"
    assert "horizon" not in defaults


def test_what_was_said_is_no_default(load: Loader) -> None:
    study = load(study={"cohort": {"cycle": 0.5, "correction": "none"}, "clocks.discharge.ratio": 1})
    keys = [k for k, _ in study.defaults]
    assert not {"cohort.cycle", "cohort.correction", "clocks.discharge.ratio", "run.seed"} & set(keys)


def test_inputs_are_converted_to_study_units(load: Loader) -> None:
    yearly = {i.name: i for i in load().inputs}
    assert yearly["c_bed_day"].node.value == pytest.approx(400 * 365.25)
    assert yearly["c_nurse"].node.value == pytest.approx(600)
    assert (yearly["c_home"].low, yearly["c_home"].high) == (1200, 1800)
    monthly = {i.name: i for i in load(study={"time": "month", "clocks.background.hazard.beyond": "hold"}).inputs}
    assert monthly["c_home"].node.value == pytest.approx(125)
    assert monthly["c_home"].low == pytest.approx(100)


def test_inputs_come_after_those_they_depend_on(load: Loader) -> None:
    names = load(inputs={"z": "y + 1,-,,,,invented,", "y": "2 * x,-,,,,invented,", "x": "3,-,,,,invented,"}).input_names
    assert names.index("x") < names.index("y") < names.index("z")


def test_a_horizon_may_be_given_in_another_unit(load: Loader) -> None:
    assert load(horizon={"value": 120, "unit": "month"}).horizon == pytest.approx(10)


def test_a_state_may_be_absorbing_without_being_dead(load: Loader) -> None:
    study = load(study={"states.Cured": {"absorbing": True, "dead": False, "utility": 0.9},
                        "clocks.cure": {"from": "Home", "to": "Cured", "hazard": {"rate": 0.1}}})  # fmt: skip
    assert [(s.name, s.dead) for s in study.states] == [
        ("Home", False), ("Hospital", False), ("Dead", True), ("Cured", False),
    ]  # fmt: skip


def test_a_study_without_absorbing_state_is_allowed(load: Loader) -> None:
    study = load(study={"states.Dead": None, "clocks.hospital_death": None, "clocks.background": None})
    assert [s.name for s in study.states] == ["Home", "Hospital"]


def test_fits_used_elsewhere_and_columns_not_read_are_warned_of(load: Loader) -> None:
    inputs = "name,value,unit,source,lo\nx,1,-,invented,0\n"
    tables = changed(STUDY, {"clocks.discharge.hazard": {"fit": "home_stay"}})
    warnings = load(text=study_text(tables)).warnings
    assert any("clocks.discharge.hazard: the fit home_stay is of Home to Hospital" in w for w in warnings)
    simple = {
        "attributes": {}, "states": {"A": {"utility": 1, "start": True}, "B": {"absorbing": True}}, "fits": {},
        "clocks": {"x": {"from": "A", "to": "B", "hazard": {"rate": 1}}}, "strategies": {"p": {}, "q": {}},
        "decision": {"thresholds": [1]},
    }  # fmt: skip
    warned = load(text=study_text({**STUDY, **simple}), files={"inputs.csv": inputs}).warnings
    assert warned == ("inputs.csv: column 'lo' is not read. Did you mean 'low'?",)


def test_a_coefficient_nobody_uses_and_a_materiality_of_zero_are_warned_of(load: Loader) -> None:
    zero = {"share": 0, "amount": 0}
    study = load(study={"decision.materiality": zero, "clocks.readmission.ratio": "exp(b_nurse)"})
    assert {w.split(":")[0] for w in study.warnings} == {"fits.home_stay.covariates.b_prior", "decision.materiality"}


def test_a_population_file_gives_rows_with_codes(load: Loader) -> None:
    study = load(
        study={"population.from": "patients.csv", "attributes.age": {"within": [40, 90]},
               "attributes.sex": {"levels": ["female", "male"]}},
        files={"patients.csv": "id,age,sex\n1,50,male\n2,61.5,female\n"},
    )  # fmt: skip
    assert study.rows == {"age": (50.0, 61.5), "sex": (1.0, 0.0)}
    assert "patients.csv" in study.files


def test_a_life_table_in_long_form_equals_the_wide_one(load: Loader) -> None:
    wide = "age,female,male\n" + "".join(f"{a},{a / 1000},{a / 500}\n" for a in range(40, 60))
    long = "age,sex,value\n" + "".join(
        f"{a},{s},{a / d}\n" for s, d in (("male", 500), ("female", 1000)) for a in range(40, 60)
    )
    hazards = [load(files={"lifetable.csv": text}).clocks[3].hazard for text in (wide, long)]
    assert hazards[0].edges == hazards[1].edges == tuple(float(a) for a in range(40, 61))
    assert hazards[0].rates == hazards[1].rates


def test_a_study_can_be_sent_to_another_process(load: Loader) -> None:
    study = load()
    again = pickle.loads(pickle.dumps(study))
    assert again.content_hash == study.content_hash
    assert again.clocks == study.clocks


class Fitted:
    hazard = Hazard("weibull", {"shape": 0.7, "scale": 0.8})
    coefficients: ClassVar[dict[str, float]] = {}


def test_loading_and_binding_is_quick(tmp_path: Path) -> None:
    """0.3 s is the limit promised; measured 0.01 s for this study, and 0.1 s with 6,000 episodes."""
    without_fit = {"clocks.readmission.hazard": {"rate": 1}, "clocks.readmission.ratio": 1}
    data = {"fits.home_stay.covariates": None}
    folder = write_study(tmp_path / "study", files={"episodes.csv": episodes(2400)}, study={**without_fit, **data})
    load_study(folder)
    start = time.perf_counter()
    bind(load_study(folder), {"home_stay": Fitted()})
    assert time.perf_counter() - start < 0.3


def test_reading_studies_imports_no_compiler_and_no_plotting() -> None:
    code = (
        "import sys, microsim.study.load, microsim.study.bind, microsim.study.pathway, microsim.cli.check;"
        "print([m for m in ('numba', 'matplotlib', 'pandas', 'scipy') if m in sys.modules])"
    )
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert out.stdout.strip() == "[]"


def test_help_imports_no_schema() -> None:
    code = (
        "import sys, microsim.cli.check, microsim.cli.schema;"
        "print([m for m in ('pydantic', 'numpy', 'rich') if m in sys.modules])"
    )
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert out.stdout.strip() == "[]"
