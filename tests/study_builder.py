"""Writes a small valid study folder, whole or with pieces changed, for tests of any room.

The study is invented: heart-failure patients at home and in hospital, with a fit, a life table and three strategies.
"""

from __future__ import annotations

import random
from pathlib import Path
from typing import Any

STUDY: dict[str, Any] = {
    "format": 1,
    "title": "Nurse-led follow-up (invented)",
    "invented": True,
    "time": "year",
    "horizon": 10,
    "currency": "EUR 2026",
    "decision": {
        "comparator": "usual_care", "thresholds": [20_000, 35_000], "materiality": {"share": 0.05, "amount": 250},
    },
    "discounting": {"costs": 0.035, "effects": 0.035},
    "run": {"patients": 1000, "seed": 7},
    "attributes": {
        "age": {"normal": {"mean": "age_mean", "sd": 8}, "within": [45, 90]},
        "sex": {"choice": {"female": "p_female", "male": "1 - p_female"}},
    },
    "states": {
        "Home": {
            "label": "At home", "start": True, "utility": "u_home - u_per_admission * min(visits(Hospital), 6)",
            "cost": {"care": "c_home"},
        },
        "Hospital": {
            "utility": "u_hospital", "cost": {"bed": "c_bed_day"},
            "entry": {"cost": {"admission": "c_admission"}, "qaly": "-0.01"},
        },
        "Dead": {"absorbing": True},
    },
    "clocks": {
        "readmission": {
            "from": "Home", "to": "Hospital", "hazard": {"fit": "home_stay"},
            "ratio": "exp(b_prior * min(visits(Hospital), 6))",
        },
        "discharge": {
            "from": "Hospital", "to": "Home", "hazard": {"weibull": {"shape": 1.3, "scale": 9}, "unit": "day"},
        },
        "hospital_death": {
            "from": "Hospital", "to": "Dead",
            "hazard": {"probability": "p_death", "per": {"value": 1, "unit": "month"}},
        },
        "background": {
            "from": ["Home", "Hospital"], "to": "Dead", "time": "age",
            "hazard": {"table": "lifetable.csv", "by": "sex", "unit": "yearly probability", "beyond": "hold"},
        },
    },
    "fits": {
        "home_stay": {
            "data": "episodes.csv", "from": "Home", "to": "Hospital", "family": "weibull", "unit": "day",
            "covariates": {"b_prior": "min(prior, 6)", "b_nurse": "arm == 'nurse'"},
        },
    },
    "strategies": {
        "usual_care": {"label": "Usual care"},
        "nurse_led": {
            "label": "Nurse-led follow-up",
            "inputs": {"c_home": "c_home + 100"},
            "clocks": {"readmission": {"ratio": {"times": "hr_nurse"}}},
            "states": {"Home": {"cost": {"programme": "c_nurse", "care": {"plus": 10}}}},
            "once": {"cost": {"programme": "c_setup"}},
        },
    },
}  # fmt: skip

INPUTS = """\
name,value,unit,low,high,law,source,label
age_mean,70,year,,,,invented,Mean age
p_female,0.45,probability,,,,invented,
u_home,0.75,utility,0.7,0.8,beta,invented,
u_hospital,0.4,utility,,,,invented,
u_per_admission,0.02,utility,,,,invented,
c_home,1500,EUR/year,1200,1800,gamma,invented,
c_bed_day,400,EUR/day,,,,invented,
c_admission,900,EUR,,,,invented,
c_nurse,50,EUR/month,,,,invented,
c_setup,2 * c_admission / 9,EUR,,,,invented,
hr_nurse,0.8,ratio,0.68,0.94,lognormal,invented,
p_death,0.05,probability,,,,invented,
"""


def life_table() -> str:
    """Ages 40 to 100, Gompertz-like yearly probabilities."""
    rows = ["age,female,male"]
    for age in range(40, 101):
        q = min(0.0008 * 1.1 ** (age - 40), 0.9)
        rows.append(f"{age},{q:.6f},{min(1.3 * q, 0.95):.6f}")
    return "\n".join(rows) + "\n"


def episodes(patients: int = 60) -> str:
    """Alternating stays at home and in hospital, in days."""
    draw = random.Random(3)
    rows = ["patient,from,to,entry,exit,prior,arm"]
    for p in range(patients):
        time, arm = 0.0, "nurse" if p % 2 else "usual"
        for prior in range(draw.randint(1, 4)):
            stay = round(draw.expovariate(1 / 200.0) + 1, 1)
            rows.append(
                f"{p},Home,{'Hospital' if draw.random() < 0.7 else 'censored'},{time},{time + stay:.1f},{prior},{arm}"
            )
            time = round(time + stay + draw.uniform(3, 15), 1)
    return "\n".join(rows) + "\n"


def toml(value: Any) -> str:
    """A value as inline TOML."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return '"' + value.replace("\\", "\\\\").replace('"', '\\"').replace("\n", "\\n") + '"'
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{_key(k)} = {toml(v)}" for k, v in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(toml(v) for v in value) + "]"
    return repr(value)


def _key(key: str) -> str:
    return key if key.replace("_", "").replace("-", "").isalnum() and key.isascii() else toml(key)


_NAMED = ("attributes", "states", "clocks", "fits", "strategies")


def study_text(tables: dict[str, Any]) -> str:
    """study.toml of nested tables: one header per named thing, one line per key."""
    lines = [f"{_key(k)} = {toml(v)}" for k, v in tables.items() if not isinstance(v, dict)]
    for key, table in tables.items():
        if not isinstance(table, dict):
            continue
        inner = [(f"{_key(key)}.{_key(n)}", t) for n, t in table.items()] if key in _NAMED else [(_key(key), table)]
        for header, content in inner:
            lines += ["", f"[{header}]", *(f"{_key(k)} = {toml(v)}" for k, v in content.items())]
    return "\n".join(lines) + "\n"


def changed(tables: dict[str, Any], changes: dict[str, Any]) -> dict[str, Any]:
    """A copy with dotted keys set; a value of None removes the key."""
    out = {k: _copy(v) for k, v in tables.items()}
    for dotted, value in changes.items():
        here = out
        *path, last = dotted.split(".")
        for part in path:
            here = here.setdefault(part, {})
        if value is None:
            here.pop(last, None)
        else:
            here[last] = _copy(value)
    return out


def _copy(value: Any) -> Any:
    return {k: _copy(v) for k, v in value.items()} if isinstance(value, dict) else value


def write_study(
    folder: Path,
    *,
    study: dict[str, Any] | None = None,
    inputs: dict[str, str] | None = None,
    files: dict[str, str | None] | None = None,
    text: str | None = None,
    **changes: Any,
) -> Path:
    """Write the study and return its folder.

    study: dotted key -> value (None removes); inputs: name -> whole row of inputs.csv without the name (added or
    replaced); files: file name -> content (None: not written); text: study.toml as it stands instead. Keyword
    arguments set keys too, with __ for the dot: write_study(folder, states__Home__utility="0.5").
    """
    folder.mkdir(parents=True, exist_ok=True)
    keys = {**(study or {}), **{k.replace("__", "."): v for k, v in changes.items()}}
    contents: dict[str, str | None] = {
        "study.toml": text if text is not None else study_text(changed(STUDY, keys)),
        "inputs.csv": _with_rows(INPUTS, inputs or {}), "lifetable.csv": life_table(), "episodes.csv": episodes(),
        **(files or {}),
    }  # fmt: skip
    for name, content in contents.items():
        if content is not None:
            (folder / name).write_text(content, encoding="utf-8")
    return folder


def _with_rows(text: str, rows: dict[str, str]) -> str:
    lines = text.splitlines()
    for name, rest in rows.items():
        at = next((i for i, line in enumerate(lines) if line.startswith(f"{name},")), None)
        if at is None:
            lines.append(f"{name},{rest}")
        else:
            lines[at] = f"{name},{rest}"
    return "\n".join(lines) + "\n"
