"""Each fault a study can have: a valid study with one thing changed gives that fault, at its key and place."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from study_builder import episodes, life_table, write_study

from microsim.errors import InputError
from microsim.study.load import load_study


@dataclass(frozen=True)
class Case:
    """study, inputs, files: as in write_study. key and problem: what one of the faults must hold; only: no other."""

    name: str
    key: str
    problem: str
    study: dict[str, Any] = field(default_factory=dict)
    inputs: dict[str, str] = field(default_factory=dict)
    files: dict[str, str | None] = field(default_factory=dict)
    remedy: str = ""
    only: bool = True


def e(row: str) -> dict[str, str | None]:
    """The episodes file with one more row, which is row n + 1 of the file."""
    return {"episodes.csv": episodes() + row + "\n"}


POPULATION = {
    "population.from": "patients.csv",
    "attributes.age": {"within": [40, 90]},
    "attributes.sex": {"levels": ["female", "male"]},
}
WEIBULL = {"weibull": {"shape": 1, "scale": 2}}

CASES = [
    # names
    Case("unknown target", "clocks.discharge.to", "unknown state 'Hme'", {"clocks.discharge.to": "Hme"},
        remedy="'Home'", only=False),
    Case("unknown source", "clocks.discharge.from", "unknown state", {"clocks.discharge.from": ["Hospital", "Ward"]}),
    Case("source named twice", "clocks.background.from", "named 2 times", {"clocks.background.from": ["Home", "Home",
        "Hospital"]}),
    Case("state named as an input", "states.c_home", "already an input", {
        "states.c_home": {"absorbing": True}, "clocks.x": {"from": "Home", "to": "c_home", "hazard": {"rate": 0.1}}},
        only=False),
    Case("attribute named as a state", "attributes.Home", "already a state", {"attributes.Home": {"value": 1}}),
    Case("attribute named as an input", "attributes.u_home", "already an input", {"attributes.u_home": {"value": 1}}),
    Case("coefficient named as an input", "fits.home_stay.covariates.u_home", "already an input", {
        "fits.home_stay.covariates.u_home": "prior"}),
    Case("state that is no name", "states.At home", "is not a name", {
        "states.At home": {"absorbing": True}, "clocks.x": {"from": "Home", "to": "At home", "hazard": {
        "rate": 0.1}}}),
    Case("attribute named as a function", "attributes.visits", "is the name of a function", {"attributes.visits": {
        "value": 1}}),
    Case("clock named as a reserved word", "clocks.lambda", "reserved word", {"clocks.lambda": {"from": "Home",
        "to": "Dead", "hazard": {"rate": 0.1}}}),
    Case("strategy that is no name", "strategies.plan-b", "is not a name", {"strategies.plan-b": {}}),
    Case("input named as a function", "name", "is the name of a function", inputs={"exp": "1,-,,,,invented,"}),
    Case("input that is no name", "name", "is not a name", inputs={"c home": "1,-,,,,invented,"}),
    Case("unknown comparator", "decision.comparator", "unknown strategy", {"decision.comparator": "usual_car"},
        remedy="'usual_care'"),
    Case("unknown fit", "clocks.readmission.hazard.fit", "unknown fit", {"clocks.readmission.hazard.fit": "home_sty"},
        remedy="'home_stay'"),
    Case("unknown family of a fit", "fits.home_stay.family", "unknown family", {"fits.home_stay.family": "weibul"},
        remedy="'weibull'"),
    Case("fit from a state that is none", "fits.home_stay.from", "unknown state", {"fits.home_stay.from": "Hom"}),
    Case("fit to a state that is none", "fits.home_stay.to", "unknown state", {"fits.home_stay.to": "Ward"}),
    Case("strategy changes an unknown state", "strategies.nurse_led.states.Hme", "unknown state", {
        "strategies.nurse_led.states.Hme": {"utility": 1}}),
    Case("strategy changes an unknown clock", "strategies.nurse_led.clocks.readmision", "unknown clock", {
        "strategies.nurse_led.clocks.readmision": {"ratio": 1}}),
    Case("strategy changes an unknown input", "strategies.nurse_led.inputs.c_hme", "unknown input", {
        "strategies.nurse_led.inputs.c_hme": 1}),
    # the pathway
    Case("unreachable state", "states.Ward", "cannot be reached", {
        "states.Ward": {"utility": 0.5}, "clocks.x": {"from": "Ward", "to": "Dead", "hazard": {"rate": 1}}}),
    Case("state without exit", "states.Ward", "no exit", {
        "states.Ward": {"utility": 0.5}, "clocks.x": {"from": "Home", "to": "Ward", "hazard": {"rate": 1}}}),
    Case("absorbing state with an exit", "states.Dead.absorbing", "has an exit", {"clocks.x": {"from": "Dead",
        "to": "Home", "hazard": {"rate": 1}}}),
    Case("dead state that is not absorbing", "states.Hospital.dead", "must be absorbing", {
        "states.Hospital.dead": True}),
    Case("no start", "states", "no state has a start", {"states.Home.start": False}),
    Case("starts that do not sum to 1", "states", "sum to 1.2", {"states.Home.start": 0.7,
        "states.Hospital.start": 0.5}),
    Case("start outside [0, 1]", "states.Home.start", "lies in [0, 1]", {"states.Home.start": 1.5,
        "states.Hospital.start": -0.5}, only=False),
    Case("start that depends on a patient", "states.Home.start", "differs between patients", {
        "states.Home.start": "1 if age > 3 else 1"}),
    Case("no utility", "states.Home.utility", "has no utility", {"states.Home.utility": None}),
    Case("one strategy", "strategies", "nothing to compare", {"strategies.nurse_led": None}),
    # formulas
    Case("unknown name in a formula", "states.Home.utility", "unknown name 'u_hom'", {"states.Home.utility": "u_hom"},
        remedy="'u_home'"),
    Case("attribute access", "states.Home.utility", "reading .real", {"states.Home.utility": "u_home.real"}),
    Case("call outside the list", "states.Home.utility", "unknown function 'eval'", {
        "states.Home.utility": "eval(1)"}),
    Case("unknown level", "clocks.discharge.ratio", "no level 'femal'", {
        "clocks.discharge.ratio": "2 if sex == 'femal' else 1"}, remedy="'female'"),
    Case("category as a number", "clocks.discharge.ratio", "categorical and used as a number", {
        "clocks.discharge.ratio": "1 + sex"}),
    Case("memory of an unknown state", "states.Home.utility", "unknown state 'Hospitl'", {
        "states.Home.utility": "0.1 * visits(Hospitl)"}, remedy="'Hospital'"),
    Case("syntax of a formula", "states.Home.utility", "not a formula", {"states.Home.utility": "1 +"}),
    Case("memory where only inputs are allowed", "clocks.discharge.hazard.weibull.scale", "memory of a patient", {
        "clocks.discharge.hazard": {"weibull": {"shape": 1, "scale": "1 + events()"}}}),
    Case("attribute in a one-off cost", "strategies.nurse_led.once.cost.programme", "differs between patients", {
        "strategies.nurse_led.once.cost.programme": "c_setup * age"}),
    Case("strategy input that depends on a patient", "strategies.nurse_led.inputs.c_home", "differs between patients",
        {"strategies.nurse_led.inputs.c_home": "c_home * age"}),
    Case("division by zero", "states.Home.utility", "gives inf", {
        "states.Home.utility": "0.5 + u_home / (u_home - u_home)"}),
    Case("start-independent age at entry", "states.Home.utility", "needs an attribute named age", {
        "attributes.age": None, "clocks.background.time": "elapsed",
        "states.Home.utility": "0.9 - 0.001 * at_entry(age)"}, only=False),
    # numbers
    Case("probability above 1", "p_death", "lies in [0, 1]", inputs={"p_death": "1.5,probability,,,,invented,"},
        only=False),
    Case("utility input above 1", "u_home", "at most 1", inputs={"u_home": "1.2,utility,,,,invented,"}, only=False),
    Case("constant utility above 1", "states.Hospital.utility", "at most 1", {"states.Hospital.utility": 1.1}),
    Case("utility above 1 at entry", "states.Home.utility", "at most 1", {
        "states.Home.utility": "1.1 - 0.2 * visits(Hospital)"}),
    Case("utility above 1 for one sex", "states.Home.utility", "at most 1", {
        "states.Home.utility": "0.9 + 0.2 * (sex == 'male')"}),
    Case("strategy lifts a utility above 1", "strategies.nurse_led.states.Home.utility", "at most 1", {
        "strategies.nurse_led.states.Home.utility": {"plus": 0.5}}),
    Case("strategy input lifts a utility above 1", "u_home", "at most 1", {"strategies.nurse_led.inputs.u_home": 1.3},
        only=False),
    Case("hazard from a probability of 1", "clocks.hospital_death.hazard.probability", "no finite rate", {
        "clocks.hospital_death.hazard.probability": 1}),
    Case("probability without its time", "clocks.hospital_death.hazard.per", "needs the time", {
        "clocks.hospital_death.hazard": {"probability": 0.1}}),
    Case("negative scale", "clocks.discharge.hazard", "must be positive", {"clocks.discharge.hazard": {"weibull": {
        "shape": 1, "scale": -9}}}),
    Case("negative rate", "clocks.discharge.hazard", "cannot be negative", {"clocks.discharge.hazard": {"rate": -1}}),
    Case("negative ratio", "clocks.discharge.ratio", "cannot be negative", {"clocks.discharge.ratio": -2}),
    Case("choice that does not sum to 1", "attributes.sex.choice", "sum to 0.9", {
        "attributes.sex.choice.male": 0.45}),
    Case("choice outside [0, 1]", "attributes.sex.choice.male", "lies in [0, 1]", {"attributes.sex.choice": {
        "female": 1.2, "male": -0.2}}, only=False),
    Case("negative sd", "attributes.age.normal.sd", "must be positive", {"attributes.age.normal.sd": -8}),
    Case("beta that cannot be", "attributes.x.beta", "no beta law", {"attributes.x": {"beta": {"mean": 0.5,
        "sd": 0.6}}}),
    Case("uniform upside down", "attributes.x.uniform", "low is not below high", {"attributes.x": {"uniform": {
        "low": 2, "high": 1}}}),
    Case("within upside down", "attributes.age.within", "pair", {"attributes.age.within": [90, 45]}, only=False),
    Case("non-finite number", "discounting.costs", "not a finite number", {"discounting.costs": float("inf")}),
    Case("non-finite input", "value", "not a finite number", inputs={"c_nurse": "nan,EUR/month,,,,invented,"}),
    Case("cyclic inputs", "value", "circle", inputs={"a": "b + 1,-,,,,invented,", "b": "a * 2,-,,,,invented,"}),
    Case("negative discount", "discounting.costs", "[0, 1)", {"discounting.costs": -0.01}),
    Case("negative materiality", "decision.materiality.amount", "cannot be negative", {
        "decision.materiality.amount": -1}),
    Case("negative share", "decision.materiality.share", "cannot be negative", {"decision.materiality.share": -0.1}),
    Case("threshold of zero", "decision.thresholds", "must be positive", {"decision.thresholds": [0, 20]}),
    Case("thresholds that fall", "decision.thresholds", "must increase", {"decision.thresholds": [30, 20]}),
    Case("no threshold", "decision.thresholds", "no threshold", {"decision.thresholds": []}),
    Case("alpha of 1", "decision.alpha", "between 0 and 0.5", {"decision.alpha": 1}),
    Case("negative horizon", "horizon", "must be positive", {"horizon": -3}, only=False),
    Case("cycle longer than the horizon", "cohort.cycle", "longer than the horizon", {"cohort.cycle": 11}),
    Case("correlation matrix that cannot be", "population.correlation", "not positive definite", {
        "attributes.x": {"normal": {"mean": 0, "sd": 1}}, "population.correlation": [
            {"between": ["age", "sex"], "value": 0.9}, {"between": ["sex", "x"], "value": 0.9}, {"between": ["age",
        "x"], "value": -0.9}]}),
    Case("correlation of 1", "population.correlation.0", "strictly between", {"population.correlation": [{
        "between": ["age", "sex"], "value": 1}]}),
    Case("correlation with a stranger", "population.correlation.0", "unknown attribute", {"population.correlation": [{
        "between": ["age", "sx"], "value": 0.1}]}),
    # dimensions
    Case("cost per year expected", "states.Home.cost.care", "money where money / time", {
        "states.Home.cost.care": "c_admission"}),
    Case("one-off cost expected", "states.Hospital.entry.cost.admission", "money / time where money", {
        "states.Hospital.entry.cost.admission": "c_home"}),
    Case("adding money and a flow", "states.Home.cost.care", "adding", {
        "states.Home.cost.care": "c_home + c_admission"}),
    Case("exp of money", "clocks.discharge.ratio", "needs a plain number", {"clocks.discharge.ratio": "exp(c_home)"}),
    Case("ratio with a dimension", "clocks.discharge.ratio", "where a plain number", {
        "clocks.discharge.ratio": "age_mean"}),
    Case("scale without a unit", "clocks.discharge.hazard.weibull.scale", "where time is wanted", {
        "clocks.discharge.hazard": {"weibull": {"shape": 1, "scale": "hr_nurse"}}}),
    Case("unit given twice", "clocks.discharge.hazard.weibull.scale", "where a plain number", {
        "clocks.discharge.hazard.weibull.scale": "age_mean"}),
    Case("strategy input with another unit", "strategies.nurse_led.inputs.c_home", "where money / time", {
        "strategies.nurse_led.inputs.c_home": "c_admission"}),
    Case("input formula with another unit", "value", "the unit says", inputs={
        "c_setup": "2 * c_home,EUR,,,,invented,"}),
    Case("age beside a time", "clocks.discharge.ratio", "subtracting", {
        "clocks.discharge.ratio": "exp(0.1 * (age - age_mean))"}, remedy="plain number of years"),
    Case("utility per year", "states.Home.utility", "1 / time where", {"states.Home.utility": "u_x"},
        {"u_x": "0.7,QALY/year,,,,invented,"}, remedy="the unit utility"),
    Case("probability per month", "unit", "no other unit", inputs={"p_x": "0.1,probability/month,,,,invented,"}),
    Case("unknown unit", "unit", "unknown unit 'EU'", inputs={"c_setup": "2,EU/year,,,,invented,"}, remedy="'EUR'",
        only=False),
    # inputs.csv
    Case("no column source", "source", "column is missing", files={"inputs.csv": "name,value,unit\nx,1,-\n"},
        only=False),
    Case("blank source", "source", "has no source", inputs={"c_nurse": "50,EUR/month,,,,,"}),
    Case("input twice", "name", "defined twice", files={"inputs.csv": None}, only=False),
    Case("unknown law", "law", "unknown law", inputs={"c_nurse": "50,EUR/month,40,60,gama,invented,"},
        remedy="'gamma'"),
    Case("law without interval", "law", "needs low and high", inputs={"c_nurse": "50,EUR/month,,,gamma,invented,"}),
    Case("value outside its interval", "value", "outside its interval", inputs={
        "c_nurse": "50,EUR/month,60,70,gamma,invented,"}),
    Case("interval upside down", "low", "not below high", inputs={"c_nurse": "50,EUR/month,60,40,gamma,invented,"}),
    Case("row too long", "row", "has 9 cells", inputs={"c_nurse": "50,EUR/month,,,,invented,a,b"}),
    # files
    Case("missing life table", "clocks.background.hazard.table", "no such file", files={"lifetable.csv": None}),
    Case("missing episodes", "fits.home_stay.data", "no such file", files={"episodes.csv": None}),
    Case("missing inputs", "inputs", "no such file", {"inputs": "input.csv"}, remedy="'inputs.csv'", only=False),
    Case("file outside the folder", "fits.home_stay.data", "inside the study folder", {
        "fits.home_stay.data": "../episodes.csv"}),
    Case("missing column", "entry", "column is missing", files={
        "episodes.csv": "patient,from,to,start,exit,prior,arm\n1,Home,Hospital,0,1,0,nurse\n"}),
    Case("negative sojourn", "exit", "negative sojourn", files=e("999,Home,Hospital,10,5,0,nurse")),
    Case("overlapping episodes", "entry", "patient 999: the episode overlaps",
        files=e("999,Home,Hospital,0,10,0,nurse\n999,Home,Hospital,5,20,0,nurse")),
    Case("unknown state in the data", "to", "unknown state 'Ward'", files=e("999,Home,Ward,0,10,0,nurse")),
    Case("number that is none", "exit", "not a finite number", files=e("999,Home,Hospital,0,inf,0,nurse")),
    Case("covariate that is blank", "prior", "not a finite number", files=e("999,Home,Hospital,0,10,,nurse")),
    Case("covariate category that is blank", "arm", "not a finite number", files=e("999,Home,Hospital,0,10,1,")),
    Case("covariate with unknown column", "fits.home_stay.covariates.b_prior", "unknown name 'priors'", {
        "fits.home_stay.covariates.b_prior": "priors"}, remedy="'prior'"),
    Case("covariate with one value", "fits.home_stay.covariates.b_prior", "one value only", {
        "fits.home_stay.covariates.b_prior": "0 * prior"}),
    Case("fit without events", "fits.home_stay", "no transition from Hospital to Dead", {
        "fits.home_stay.from": "Hospital", "fits.home_stay.to": "Dead"}),
    Case("fit on another time scale", "clocks.readmission.hazard.fit", "runs on elapsed time", {
        "fits.home_stay.time": "elapsed"}),
    # life tables
    Case("table that stops before the horizon", "clocks.background.hazard.table", "stops before the horizon", {
        "clocks.background.hazard.beyond": None, "horizon": 20}),
    Case("table that starts too late", "clocks.background.hazard.table", "starts too late", {
        "attributes.age.within": [30, 90]}),
    Case("age without bound", "attributes.age", "nothing bounds age", {"attributes.age.within": None,
        "clocks.background.hazard.beyond": None}),
    Case("table by a stranger", "clocks.background.hazard.by", "not a categorical attribute", {
        "clocks.background.hazard.by": "sx"}),
    Case("table without unit", "clocks.background.hazard.unit", "says what its numbers are", {
        "clocks.background.hazard.unit": None}),
    Case("table without a level", "male", "column is missing", files={"lifetable.csv": "age,female\n40,0.1\n"}),
    Case("table with a gap", "age", "one year", files={"lifetable.csv": life_table().replace("\n60,", "\n160,")},
        only=False),
    Case("probability above 1 in a table", "value", "must lie in [0, 1]", files={
        "lifetable.csv": "age,female,male\n40,1.2,0.1\n"}, only=False),
    Case("certain death in a table", "value", "no finite rate", files={
        "lifetable.csv": "age,female,male\n40,1,0.1\n"}, only=False),
    # people
    Case("age clock without age", "clocks.background.hazard.table", "needs an attribute named age", {
        "attributes.age": None}),
    Case("attribute without law", "attributes.x", "no law", {"attributes.x": {"label": "x"}}),
    Case("attribute with two laws", "attributes.x", "2 laws", {"attributes.x": {"value": 1, "uniform": {"low": 0,
        "high": 1}}}),
    Case("law with wrong parameters", "attributes.x.gamma", "is given by", {"attributes.x": {"gamma": {"shape": 1,
        "scale": 2}}}),
    Case("unknown level in the population", "sex", "is not a level", POPULATION, files={
        "patients.csv": "age,sex\n50,female\n60,x\n"}),
    Case("age outside within in the population", "age", "outside [40, 90]", POPULATION, files={
        "patients.csv": "age,sex\n50,female\n95,male\n"}),
    Case("strategy that changes the patients", "strategies.nurse_led.inputs.age_mean", "describes the patients", {
        "strategies.nurse_led.inputs.age_mean": 60}),
    Case("strategy that changes the patients through another input", "strategies.nurse_led.inputs.age_base",
        "describes the patients", {"strategies.nurse_led.inputs.age_base": 60},
        {"age_base": "70,year,,,,invented,", "age_mean": "age_base + 1,year,,,,invented,"}),
    Case("semicolons", "header", "separated by semicolons", files={"lifetable.csv": "age;female;male\n40;0;0\n"}),
    # the schema
    Case("unknown key", "states.Home.utilty", "unknown key", {"states.Home.utilty": 1}, remedy="'utility'"),
    Case("unknown top key", "horizn", "unknown key", {"horizn": 1}, remedy="'horizon'"),
    Case("unknown key in a hazard", "clocks.discharge.hazard.weibul", "unknown key", {"clocks.discharge.hazard": {
        "weibul": {"shape": 1}}}, remedy="'weibull'", only=False),
    Case("strategy changes the target", "strategies.nurse_led.clocks.readmission.to", "cannot change", {
        "strategies.nurse_led.clocks.readmission.to": "Dead"}),
    Case("strategy exchanges a table", "strategies.nurse_led.clocks.background.hazard", "cannot be exchanged", {
        "strategies.nurse_led.clocks.background.hazard": {"rate": 0.1}}),
    Case("missing key", "clocks.discharge.to", "missing", {"clocks.discharge.to": None}),
    Case("missing title", "title", "missing", {"title": None}),
    Case("wrong choice", "time", "not one of the choices", {"time": "years"}, remedy="'year'"),
    Case("wrong format", "format", "not one of the choices", {"format": 2}),
    Case("wrong type", "states.Home.utility", "wrong type", {"states.Home.utility": True}),
    Case("text for a number", "discounting.costs", "wrong type", {"discounting.costs": "3.5 %"}),
    Case("unknown key in a length of time", "horizon.x", "unknown key", {"horizon": {"value": 1, "unit": "year",
        "x": 1}}, only=False),
    Case("text for a table", "decision.materiality", "wrong type", {"decision.materiality": "none"}),
    Case("text among thresholds", "decision.thresholds.1", "wrong type", {"decision.thresholds": [1, "a"]}),
    Case("no patients", "run.patients", "greater than or equal to 1", {"run.patients": 0}),
    Case("times and plus", "strategies.nurse_led.clocks.readmission.ratio", "exactly one", {
        "strategies.nurse_led.clocks.readmission.ratio": {"times": 1, "plus": 1}}),
    Case("times of a cost that is none", "strategies.nurse_led.states.Home.cost.cares.times", "no cost cares", {
        "strategies.nurse_led.states.Home.cost.cares": {"times": 2}}, remedy="'care'"),
    Case("two hazards", "clocks.discharge.hazard", "2 ways", {"clocks.discharge.hazard": {"rate": 1, **WEIBULL}}),
    Case("no hazard", "clocks.discharge.hazard", "not given", {"clocks.discharge.hazard": {"unit": "day"}}),
    Case("stray key of a hazard", "clocks.discharge.hazard.by", "does not go with weibull", {
        "clocks.discharge.hazard.by": "sex"}),
    Case("missing parameter", "clocks.discharge.hazard.weibull", "is given by {shape, scale}", {
        "clocks.discharge.hazard": {"weibull": {"shape": 1}}}),
    Case("unknown unit of a hazard", "clocks.discharge.hazard.unit", "unknown time unit", {
        "clocks.discharge.hazard.unit": "days"}, remedy="'day'"),
]  # fmt: skip


@pytest.mark.parametrize("case", CASES, ids=lambda c: c.name.replace(" ", "_"))
def test_a_fault_is_found_and_located(case: Case, tmp_path: Path) -> None:
    files = dict(case.files)
    if case.name == "input twice":
        files = {"inputs.csv": "name,value,unit,source\nx,1,-,invented\nx,2,-,invented\n"}
    folder = write_study(tmp_path / "study", study=case.study, inputs=case.inputs, files=files)
    with pytest.raises(InputError) as caught:
        load_study(folder)
    faults = caught.value.faults
    matching = [f for f in faults if f.key == case.key and case.problem in f.problem]
    assert matching, [str(f) for f in faults]
    assert case.remedy in matching[0].remedy, matching[0]
    assert matching[0].remedy and matching[0].file
    assert str(tmp_path) not in str(caught.value)
    if case.only:
        assert faults == matching, [str(f) for f in faults]


def test_the_unchanged_study_has_no_fault(tmp_path: Path) -> None:
    study = load_study(write_study(tmp_path / "study"))
    assert [w.split(":")[0] for w in study.warnings] == ["fits.home_stay.covariates.b_nurse"]


def test_a_syntax_fault_tells_its_line(tmp_path: Path) -> None:
    folder = write_study(tmp_path / "study", text='format = 1\ntitle = "x\n')
    with pytest.raises(InputError) as caught:
        load_study(folder)
    assert [f.where for f in caught.value.faults] == ["line 2"]


def test_a_missing_study_is_an_input_error_without_the_machine_path(tmp_path: Path) -> None:
    with pytest.raises(InputError) as caught:
        load_study(tmp_path / "nowhere")
    assert str(tmp_path) not in str(caught.value)


def test_faults_of_all_parts_come_together(tmp_path: Path) -> None:
    folder = write_study(
        tmp_path / "study",
        study={
            "titel": "x",
            "states.Home.utility": "u_hom",
            "decision.thresholds": [3, 2],
            "clocks.discharge.to": "Hme",
        },
        inputs={"c_nurse": "50,EUR/month,,,,,"},
        files={"lifetable.csv": None, "episodes.csv": episodes() + "999,Home,Hospital,9,1,0,nurse\n"},
    )
    with pytest.raises(InputError) as caught:
        load_study(folder)
    keys = {f.key for f in caught.value.faults}
    wanted = {"titel", "states.Home.utility", "decision.thresholds", "clocks.discharge.to", "source", "exit"}
    assert wanted | {"clocks.background.hazard.table"} <= keys


def test_faults_say_the_line_of_the_key_and_the_row_of_the_cell(tmp_path: Path) -> None:
    folder = write_study(
        tmp_path / "study", study={"states.Hospital.utility": 3}, inputs={"c_home": "x,EUR/year,,,,invented,"}
    )
    with pytest.raises(InputError) as caught:
        load_study(folder)
    text = (folder / "study.toml").read_text().splitlines()
    line = text.index("[states.Hospital]") + 2
    where = {f.key: f.where for f in caught.value.faults}
    assert text[line - 1] == "utility = 3"
    assert where["states.Hospital.utility"] == f"line {line}"
    assert where["value"] == "row 7"


def test_many_equal_row_faults_are_shortened(tmp_path: Path) -> None:
    bad = "".join(f"{900 + i},Home,Hospital,9,1,0,nurse\n" for i in range(40))
    folder = write_study(tmp_path / "study", files={"episodes.csv": episodes() + bad})
    with pytest.raises(InputError) as caught:
        load_study(folder)
    assert len(caught.value.faults) == 6
    assert "in 35 more rows" in caught.value.faults[-1].problem
