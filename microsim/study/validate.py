"""Text of study.toml -> StudyFile, with every departure from the schema as a fault.

Faulty keys are then left out or filled with a stand-in, so that the rest of the study can be checked in the same
pass; a study with such a fault is never used.
"""

from __future__ import annotations

import copy
import re
import tomllib
from collections.abc import Iterator, Mapping
from typing import Any

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from microsim.errors import FaultList
from microsim.study.context import STUDY_FILE
from microsim.study.formula import nearest
from microsim.study.locate import Lines
from microsim.study.schema import ClockTable, StateTable, StudyFile

Raw = dict[str, Any]

# What stands in for a missing key so that checking can go on.
_STAND_INS: Mapping[str, Any] = {
    "format": 1, "title": "", "time": "year", "horizon": 1.0, "currency": "EUR", "decision": {"thresholds": [1.0]},
    "states": {}, "clocks": {}, "strategies": {}, "thresholds": [1.0], "from": "", "to": "", "hazard": {"rate": 0.0},
    "data": "", "family": "weibull", "value": 1.0, "unit": "year", "between": [],
}  # fmt: skip
_SHARED = "Every strategy shares states, sources, targets and time scales: add a clock with ratio 0 in the others."


def parse_toml(text: str, faults: FaultList) -> Raw | None:
    """The raw tables, or None after a syntax fault with its line."""
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as e:
        place = re.search(r"\(at line (\d+), column (\d+)\)", str(e))
        what = re.sub(r"\s*\(at .*\)$", "", str(e))
        where = f"line {place.group(1)}" if place else "last line"
        column = f", column {place.group(2)}" if place else ""
        faults.add(
            STUDY_FILE, "syntax", f"this is not TOML: {what}{column}", "Check quotes, brackets and commas.", where=where
        )
        return None


def validate(raw: Raw, *, lines: Lines, faults: FaultList) -> StudyFile | None:
    """The study as written; after faults, with stand-ins for what is wrong; None if nothing can be made of it."""
    data = copy.deepcopy(raw)
    for _ in range(6):
        try:
            return StudyFile.model_validate(data)
        except ValidationError as e:
            for path, errors in _by_path(e, data).items():
                key = ".".join(path)
                if not any(
                    f.file == STUDY_FILE and (f.key == key or f.key.startswith(key + ".")) for f in faults.faults
                ):
                    problem, remedy, value = _words(path, errors, data=data)
                    faults.add(STUDY_FILE, key, problem, remedy, value=value, where=lines.where(key))
                _repair(path, errors[0], data=data)
    return None


def _by_path(error: ValidationError, data: Raw) -> dict[tuple[str, ...], list[ErrorDetails]]:
    """Errors by the path of keys in the file; branches of unions fall together."""
    grouped: dict[tuple[str, ...], list[ErrorDetails]] = {}
    for e in error.errors(include_url=False, include_context=True):
        grouped.setdefault(_path(e, data), []).append(e)
    # An error on a value hides the errors of the other branches that looked inside it.
    deepest = [p for p, es in grouped.items() if es[0]["type"] in ("extra_forbidden", "missing")]
    return {p: es for p, es in grouped.items() if p in deepest or not any(q[: len(p)] == p and q != p for q in deepest)}


def _path(e: ErrorDetails, data: Raw) -> tuple[str, ...]:
    path: list[str] = []
    here: Any = data
    for part in e["loc"]:
        in_table = isinstance(here, dict) and part in here
        in_list = isinstance(here, list) and isinstance(part, int) and part < len(here)
        if in_table or in_list:
            here = here[part]
            path.append(str(part))
    if e["type"] == "missing":
        path.append(str(e["loc"][-1]))
    return tuple(path)


def _words(path: tuple[str, ...], errors: list[ErrorDetails], *, data: Raw) -> tuple[str, str, object]:
    """Problem, remedy and value of what pydantic found at one key."""
    e = errors[0]
    kind = e["type"]
    if kind == "missing":
        return "the key is missing", "Add it.", ""
    value = _shown(e["input"])
    if kind == "extra_forbidden":
        known = list(_fields(path[:-1]))
        structural = {f.alias or n for m in (StateTable, ClockTable) for n, f in m.model_fields.items()}
        if path[0] == "strategies" and len(path) == 5 and path[-1] in structural:
            return "a strategy cannot change this key", _SHARED, value
        return "unknown key", nearest(path[-1], known), value
    if kind == "literal_error":
        allowed = str(e["ctx"]["expected"])
        words = re.findall(r"'([^']*)'", allowed)
        return "not one of the choices", nearest(str(e["input"]), words) if words else f"Write {allowed}.", value
    if any(x["type"] == "finite_number" for x in errors):
        return "not a finite number", "Write a finite number.", value
    kinds = {_WANTED.get(x["type"], "") for x in errors} - {""}
    wanted = sorted(kinds - {"a whole number"} if "a number" in kinds else kinds)
    if not wanted:
        return e["msg"][0].lower() + e["msg"][1:], "Correct the value.", value
    return "the value has the wrong type", f"Write {' or '.join(wanted)}.", value


_WANTED = {
    "string_type": "text", "int_type": "a whole number", "float_type": "a number", "bool_type": "true or false",
    "model_type": "a table", "model_attributes_type": "a table", "dict_type": "a table", "list_type": "a list",
    "int_from_float": "a whole number",
}  # fmt: skip


def _shown(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 80 else text[:77] + "..."


def _fields(path: tuple[str, ...]) -> Iterator[str]:
    """Keys the schema knows below a path."""
    models: list[Any] = [StudyFile]
    for part in path:
        models = [m for model in models for m in _step(model, part)]
    for model in models:
        if isinstance(model, type) and issubclass(model, BaseModel):
            yield from (f.alias or n for n, f in model.model_fields.items())


def _step(annotation: Any, part: str) -> list[Any]:
    """Types found when a key or index is followed from a type, unions opened up."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        found = [f.annotation for n, f in annotation.model_fields.items() if (f.alias or n) == part]
    elif getattr(annotation, "__origin__", None) in (dict, list):
        found = [annotation.__args__[-1]]
    else:
        found = []
    opened: list[Any] = []
    while found:
        t = found.pop()
        arguments = getattr(t, "__args__", ())
        if arguments and getattr(t, "__origin__", None) not in (dict, list):
            found.extend(arguments)
        else:
            opened.append(t)
    return opened


def _repair(path: tuple[str, ...], e: ErrorDetails, *, data: Raw) -> None:
    """Take the faulty key (or the list it stands in) out, or put a stand-in where a key is missing."""
    here: Any = data
    for part in path[:-1]:
        following = here.get(part) if isinstance(here, dict) else here[int(part)]
        leaves_list = isinstance(following, list) and not isinstance(following[0], dict)
        if following is None or leaves_list:
            here.pop(part, None)
            return
        here = following
    if not path:
        return
    if e["type"] == "missing":
        here[path[-1]] = copy.deepcopy(_STAND_INS.get(path[-1], ""))
    elif isinstance(here, dict):
        here.pop(path[-1], None)
    else:
        here.clear()
