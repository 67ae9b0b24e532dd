"""A study damaged at random either still loads and binds, or is refused as bad input: never any other error."""

from __future__ import annotations

import random
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import study_builder

from microsim.errors import InputError
from microsim.hazards.core import Hazard
from microsim.study.bind import bind
from microsim.study.load import load_study

VALUES: tuple[Any, ...] = (
    None, 0, -1, 1e308, float("nan"), float("inf"), "", "x", "1/0", "log(-1)", "age", "sex", "Home", "visits(Home)",
    "c_home", "u_home*2", [], ["Home"], [1, "a"], [[1]], {}, {"x": 1}, {"value": 1}, {"times": 2}, {"plus": "c_home"},
    True, "9**9**9", "exp(1000)", "p_death", "since_entry(Hospital)", "age_mean", {"value": -1, "unit": "day"},
    {"normal": {"mean": 1, "sd": 1}}, [{}], [{"between": ["age"], "value": 2}], "\u0001", "episodes.csv", ".",
    "b_nurse",
)  # fmt: skip
MORE_KEYS = (
    "population.from", "population.correlation", "attributes.age.levels", "attributes.x.gamma", "states.Home.dead",
    "states.Hospital.start", "cohort.cycle", "inputs", "run.seed", "strategies.usual_care.clocks.discharge.hazard",
    "strategies.usual_care.states.Home.entry.qaly", "clocks.discharge.time",
)  # fmt: skip
CELLS = ("", "x", "-1", "1e400", "nan", "Home", "age", "c_home/0", '"', "2", "\u00e9", ",", "log(-1)", "c_setup")


class Fitted:
    hazard = Hazard("weibull", {"shape": 0.7, "scale": 0.8})
    coefficients = {"b_prior": 0.1, "b_nurse": -0.2}  # noqa: RUF012


def keys_of(table: dict[str, Any], path: str = "") -> Iterator[str]:
    for key, value in table.items():
        yield path + key
        if isinstance(value, dict):
            yield from keys_of(value, f"{path}{key}.")


def damaged_file(draw: random.Random) -> dict[str, str | None]:
    name, text = draw.choice(
        [
            ("inputs.csv", study_builder.INPUTS),
            ("episodes.csv", study_builder.episodes(20)),
            ("lifetable.csv", study_builder.life_table()),
        ]
    )
    lines = text.splitlines()
    row = draw.randrange(len(lines))
    cells = lines[row].split(",")
    cells[draw.randrange(len(cells))] = draw.choice(CELLS)
    lines[row] = ",".join(cells)
    return {name: "\n".join(lines)}


def test_a_damaged_study_is_refused_or_sound(tmp_path: Path) -> None:
    """300 studies with one to three keys replaced, some with a damaged cell; seed fixed."""
    draw = random.Random(20261201)
    keys = [*keys_of(study_builder.STUDY), *MORE_KEYS]
    outcomes = {"sound": 0, "refused": 0}
    for i in range(300):
        changes = {draw.choice(keys): draw.choice(VALUES) for _ in range(i % 3 + (i % 2))}
        try:
            text = study_builder.study_text(study_builder.changed(study_builder.STUDY, changes))
        except (AttributeError, TypeError):
            continue  # the second change lies inside what the first replaced by something without keys
        folder = study_builder.write_study(
            tmp_path / "study", text=text, files=damaged_file(draw) if i % 4 == 0 else {}
        )
        try:
            study = load_study(folder)
            bind(study, {f.name: Fitted() for f in study.fits})
            outcomes["sound"] += 1
        except InputError as e:
            assert all(f.file and f.problem and f.remedy for f in e.faults)
            outcomes["refused"] += 1
    assert outcomes["sound"] > 25 and outcomes["refused"] > 100, outcomes
