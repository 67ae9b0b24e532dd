"""Writes the invented data of this example: data/lifetable.csv and data/episodes.csv.

A stated truth (TRUTH below) is lived, event by event, by 600 invented patients who are discharged from their first
admission and then followed for two to five years. No row stands for a real person. Run it with
``python make_episodes.py``; the same two files come out, byte for byte. Only uniform numbers and their inverses are
used, so that the files do not depend on how a library samples a distribution.
"""

from __future__ import annotations

import csv
import io
import math
from dataclasses import dataclass
from pathlib import Path
from statistics import NormalDist

import numpy as np

SEED = 20_261_201
PATIENTS = 600
DAYS_PER_YEAR = 365.25
AGES = range(40, 111)

# Yearly mortality rate = level * exp(slope * age), constant within a year of age.
MORTALITY = {"female": (0.000_020, 0.0985), "male": (0.000_040, 0.0945)}

# Times in days, rates per day. Readmission hazard = Weibull(shape, scale) * exp(per_admission * min(prior, 6)).
TRUTH = {
    "age_mean": 72.0, "age_sd": 9.0, "age_low": 45.0, "age_high": 100.0, "share_female": 0.45,
    "shape": 0.65, "scale": 730.0, "per_admission": 0.12, "cap": 6,
    "stay_median": 8.0, "stay_sdlog": 0.7,
    "cardiac_death": 0.07 / DAYS_PER_YEAR, "hospital_death": 0.007,
    "follow_up_shortest": 2.0 * DAYS_PER_YEAR, "follow_up_longest": 5.0 * DAYS_PER_YEAR,
    "loss": 0.05 / DAYS_PER_YEAR,
}  # fmt: skip

COLUMNS = ("patient", "from", "to", "entry", "exit", "prior", "age", "sex")


def yearly_probability(sex: str, age: int) -> float:
    level, slope = MORTALITY[sex]
    return 1.0 - math.exp(-level * math.exp(slope * age))


def life_table() -> list[tuple[str, ...]]:
    rows = [(str(age), *(f"{yearly_probability(sex, age):.5f}" for sex in MORTALITY)) for age in AGES]
    return [("age", *MORTALITY), *rows]


@dataclass(slots=True)
class Draws:
    """Random waiting times, all through the inverse of their distribution."""

    rng: np.random.Generator

    def uniform(self) -> float:
        return float(self.rng.random())

    def exponential(self) -> float:
        return -math.log1p(-self.uniform())

    def normal(self) -> float:
        return NormalDist().inv_cdf(min(max(self.uniform(), 1e-12), 1.0 - 1e-12))

    def age(self) -> float:
        while True:
            years = TRUTH["age_mean"] + TRUTH["age_sd"] * self.normal()
            if TRUTH["age_low"] <= years <= TRUTH["age_high"]:
                return years

    def background_death(self, *, age: float, sex: str) -> float:
        """Days from inclusion to death by the life table, walking up its years of age."""
        left, at = self.exponential(), age
        while True:
            rate = -math.log1p(-yearly_probability(sex, min(int(at), AGES[-1])))
            to_birthday = math.floor(at) + 1.0 - at
            if left <= rate * to_birthday:
                return (at + left / rate - age) * DAYS_PER_YEAR
            left -= rate * to_birthday
            at = math.floor(at) + 1.0


def next_event(state: str, draws: Draws, *, prior: int) -> tuple[float, str]:
    """Days until the patient leaves ``state`` for a reason other than background death, and where to."""
    if state == "Home":
        ratio = math.exp(TRUTH["per_admission"] * min(prior, TRUTH["cap"]))
        change = TRUTH["scale"] * (draws.exponential() / ratio) ** (1.0 / TRUTH["shape"])
        death, target = draws.exponential() / TRUTH["cardiac_death"], "Hospital"
    else:
        change = TRUTH["stay_median"] * math.exp(TRUTH["stay_sdlog"] * draws.normal())
        death, target = draws.exponential() / TRUTH["hospital_death"], "Home"
    return (change, target) if change <= death else (death, "Dead")


def follow(number: int, draws: Draws) -> list[tuple[str, ...]]:
    """Rows of one patient, times rounded up to a hundredth of a day so that no episode has length zero."""
    age, sex = draws.age(), "female" if draws.uniform() < TRUTH["share_female"] else "male"
    background = draws.background_death(age=age, sex=sex)
    shortest, longest = TRUTH["follow_up_shortest"], TRUTH["follow_up_longest"]
    planned = shortest + (longest - shortest) * draws.uniform()
    end = min(planned, draws.exponential() / TRUTH["loss"])
    rows: list[tuple[str, ...]] = []
    state, hundredths, prior = "Home", 0, 0
    while state != "Dead" and hundredths / 100.0 < end:
        length, target = next_event(state, draws, prior=prior)
        leave, to = min((hundredths / 100.0 + length, target), (background, "Dead"), (end, "censored"))
        until = max(math.ceil(leave * 100.0), hundredths + 1)
        times = (f"{hundredths / 100.0:.2f}", f"{until / 100.0:.2f}")
        rows.append((f"P{number:03d}", state, to, *times, str(prior), f"{age:.1f}", sex))
        if to == "censored":
            break
        prior += state == "Hospital"
        state, hundredths = to, until
    return rows


def episodes() -> list[tuple[str, ...]]:
    draws = Draws(np.random.Generator(np.random.Philox(SEED)))
    return [COLUMNS, *(row for i in range(1, PATIENTS + 1) for row in follow(i, draws))]


def as_csv(rows: list[tuple[str, ...]]) -> bytes:
    text = io.StringIO()
    csv.writer(text, lineterminator="\n").writerows(rows)
    return text.getvalue().encode("ascii")


def files() -> dict[str, bytes]:
    """Name in the data folder -> content."""
    return {"lifetable.csv": as_csv(life_table()), "episodes.csv": as_csv(episodes())}


def main(folder: Path) -> None:
    folder.mkdir(exist_ok=True)
    for name, content in files().items():
        (folder / name).write_bytes(content)


if __name__ == "__main__":
    main(Path(__file__).parent / "data")
