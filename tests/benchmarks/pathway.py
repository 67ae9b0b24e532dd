"""The benchmark pathway of floor.c as a study folder: Home / Hospital / Dead, strategies A and B, all numbers invented."""

from __future__ import annotations

import csv
import math
from pathlib import Path

MAX_AGE = 110

STUDY = """
format = 1
title = "Benchmark pathway (invented)"
invented = true
time = "year"
horizon = 40
currency = "EUR"

[decision]
comparator = "A"
thresholds = [20_000]

[discounting]
costs = {rate!r}
effects = {rate!r}

[attributes.age]
normal = {{ mean = 72, sd = 9 }}
within = [40, 100]

[attributes.sex]
choice = {{ male = 0.5, female = 0.5 }}

[states.Home]
start = true
utility = 0.7
cost.care = "c_home"

[states.Hospital]
utility = 0.45
cost.care = "c_hospital"
entry.cost.care = "c_admission"

[states.Dead]
absorbing = true

[clocks.readmission]
from = "Home"
to = "Hospital"
hazard = {{ weibull = {{ shape = 0.7, scale = 2.5 }} }}
ratio = "exp(0.15 * min(visits(Hospital), 6))"

[clocks.death_at_home]
from = "Home"
to = "Dead"
time = "age"
hazard = {{ table = "table.csv", by = "sex", unit = "yearly rate", beyond = "hold" }}
ratio = "1.8 * exp(0.05 * visits(Hospital))"

[clocks.discharge]
from = "Hospital"
to = "Home"
hazard = {{ lognormal = {{ meanlog = {meanlog!r}, sdlog = 0.8 }} }}

[clocks.death_in_hospital]
from = "Hospital"
to = "Dead"
hazard = {{ rate = 1.2 }}
ratio = "1.03 ** max(at_entry(age) - 70, 0)"

[strategies.A]
[strategies.B]
clocks.readmission.ratio = {{ times = 0.8 }}
states.Home.cost.care = "c_home + c_programme"
"""

INPUTS = [
    ("name", "value", "unit", "source"),
    ("c_home", 1500, "EUR/year", "invented"),
    ("c_programme", 600, "EUR/year", "invented"),
    ("c_hospital", 150_000, "EUR/year", "invented"),
    ("c_admission", 2000, "EUR", "invented"),
]


def write_pathway(folder: Path) -> Path:
    """Write the study; returns its folder."""
    folder.mkdir(parents=True, exist_ok=True)
    numbers = {"rate": math.expm1(0.035), "meanlog": math.log(9 / 365.25) - 0.32}
    (folder / "study.toml").write_text(STUDY.format(**numbers), encoding="utf-8")
    rows = [("age", "male", "female")]
    rows += [(a, *(repr(c * math.exp(0.095 * (a + 0.5))) for c in (2.6e-5, 1.6e-5))) for a in range(MAX_AGE + 1)]
    for name, table in (("table.csv", rows), ("inputs.csv", INPUTS)):
        with (folder / name).open("w", newline="", encoding="utf-8") as file:
            csv.writer(file).writerows(table)
    return folder
