"""CSV text -> checked columns: inputs, life tables, populations and episodes, each fault with its row.

Rows are counted as a spreadsheet shows them (header = row 1). Knows columns and numbers, not what a study does with
them. Repeated faults of one kind in one column are shortened to the first few.
"""

from __future__ import annotations

import csv
import io
import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from microsim.errors import FaultList
from microsim.study.formula import nearest

SHOWN = 5


@dataclass(frozen=True, slots=True)
class Csv:
    """file: name in the study folder; rows: row numbers; cells: column -> text per row, stripped."""

    file: str
    rows: tuple[int, ...]
    cells: Mapping[str, tuple[str, ...]]


@dataclass(slots=True)
class RowFaults:
    """Faults of one file; at most SHOWN per column and problem, then a count of the rest."""

    file: str
    faults: FaultList
    seen: Counter[tuple[str, str]] = field(default_factory=Counter)
    remedies: dict[tuple[str, str], str] = field(default_factory=dict)

    def add(self, column: str, problem: str, remedy: str, *, row: int = 0, value: object = "") -> None:
        kind = (column, problem)
        self.seen[kind] += 1
        self.remedies[kind] = remedy
        if self.seen[kind] <= SHOWN:
            self.faults.add(self.file, column, problem, remedy, value=value, where=f"row {row}" if row else "")

    def finish(self) -> None:
        for (column, problem), n in self.seen.items():
            if n > SHOWN:
                more = f"{problem}, in {n - SHOWN} more rows"
                self.faults.add(self.file, column, more, self.remedies[column, problem])
        self.seen.clear()


def parse_csv(text: str, *, file: str, required: Sequence[str], faults: FaultList) -> Csv | None:
    """Split a CSV; None after a fault in its header. Blank lines are passed over, long or short rows are faults."""
    reader = csv.reader(io.StringIO(text), strict=True)
    out = RowFaults(file, faults)
    numbers: list[int] = []
    rows: list[list[str]] = []
    try:
        header = [c.strip() for c in next(reader, [])]
        if len(header) == 1 and ";" in header[0]:
            out.add("header", "the columns are separated by semicolons", "Save the file with commas.", row=1)
            return None
        for row in reader:
            if not any(c.strip() for c in row):
                continue
            if len(row) != len(header):
                out.add("row", f"the row has {len(row)} cells, the header {len(header)}", "Quote cells that hold a "
                        "comma, and fill every column.", row=reader.line_num)  # fmt: skip
                row = (row + [""] * len(header))[: len(header)]
            numbers.append(reader.line_num)
            rows.append([c.strip() for c in row])
    except csv.Error as e:
        out.add("row", f"the file is not readable as CSV: {e}", "Check the quotes.", row=reader.line_num)
        return None
    out.finish()
    return _columns(header, numbers, rows=rows, required=required, out=out)


def _columns(
    header: list[str], numbers: list[int], *, rows: list[list[str]], required: Sequence[str], out: RowFaults
) -> Csv | None:
    missing = [c for c in required if c not in header]
    for column in missing:
        out.add(column, "the column is missing", nearest(column, [h for h in header if h not in required]), row=1)
    for column, n in Counter(header).items():
        if n > 1:
            out.add(column or "header", f"{n} columns have this name", "Rename all but one.", row=1)
    if missing or len(set(header)) < len(header):
        return None
    if not rows:
        out.add("row", "the file has no rows below its header", "Add rows or remove the file.")
        return None
    return Csv(out.file, tuple(numbers), dict(zip(header, zip(*rows, strict=True), strict=True)))


def number(text: str) -> float | None:
    """A finite number written in plain notation, else None."""
    try:
        value = float(text.replace("_", "x"))
    except ValueError:
        return None
    return value if math.isfinite(value) else None


def numbers(table: Csv, column: str, *, out: RowFaults, blank: float | None = None) -> tuple[float, ...]:
    """A column of finite numbers; ``blank`` replaces empty cells, None makes them faults. nan after a fault."""
    values = []
    for row, text in zip(table.rows, table.cells[column], strict=True):
        value = blank if text == "" and blank is not None else number(text)
        if value is None:
            out.add(
                column, "not a finite number", "Write a number with a decimal point.", row=row, value=text or "blank"
            )
            value = math.nan
        values.append(value)
    return tuple(values)


@dataclass(frozen=True, slots=True)
class LifeTable:
    """ages: consecutive whole years, float64 as a tuple; rates: per year, one row per level of ``by`` (or one)."""

    ages: tuple[float, ...]
    rates: tuple[tuple[float, ...], ...]


@dataclass(frozen=True, slots=True)
class _Level:
    """One column of a life table: ages, row numbers, values as written."""

    ages: tuple[float, ...]
    rows: tuple[int, ...]
    values: tuple[float, ...]


def read_life_table(
    table: Csv, *, levels: tuple[str, ...], by: str | None, probability: bool, faults: FaultList
) -> LifeTable | None:
    """Wide (age, one column per level or ``value``) or long (age, by, value) table to yearly rates.

    A yearly probability q becomes the rate -ln(1 - q). None after a fault.
    """
    out = RowFaults(table.file, faults)
    before = len(faults.faults)
    ages = numbers(table, "age", out=out)
    if by is not None and by in table.cells and "value" in table.cells:
        grid = _long_form(table, ages, levels=levels, by=by, out=out)
    else:
        wanted = levels if by is not None else ("value",)
        for level in wanted:
            if level not in table.cells:
                out.add(level, "the column is missing", nearest(level, table.cells), row=1)
        grid = [_Level(ages, table.rows, numbers(table, w, out=out)) for w in wanted if w in table.cells]
    rates = []
    for column in grid:
        _consecutive(column, out)
        pairs = zip(column.values, column.rows, strict=True)
        rates.append(tuple(_rate(v, row, probability=probability, out=out) for v, row in pairs))
    if grid and any(g.ages != grid[0].ages for g in grid):
        out.add("age", "the levels do not share the same ages", "Give every level the same ages.")
    out.finish()
    if len(faults.faults) > before or not rates:
        return None
    return LifeTable(grid[0].ages, tuple(rates))


def _long_form(
    table: Csv, ages: tuple[float, ...], *, levels: tuple[str, ...], by: str, out: RowFaults
) -> list[_Level]:
    values = numbers(table, "value", out=out)
    grid = []
    for row, level in zip(table.rows, table.cells[by], strict=True):
        if level not in levels:
            out.add(by, f"{by} has no level {level!r}", nearest(level, levels), row=row, value=level or "blank")
    for level in levels:
        chosen = [i for i, v in enumerate(table.cells[by]) if v == level]
        if not chosen:
            out.add(by, f"no rows for level {level!r}", "Add them.")
            continue
        picked = (tuple(column[i] for i in chosen) for column in (ages, values))
        grid.append(_Level(next(picked), tuple(table.rows[i] for i in chosen), next(picked)))
    return grid


def _consecutive(level: _Level, out: RowFaults) -> None:
    ages, rows = level.ages, level.rows
    for i, age in enumerate(ages):
        if math.isnan(age) or (i and math.isnan(ages[i - 1])):
            continue
        if age != math.floor(age):
            out.add("age", "ages must be whole years", "Round to completed years.", row=rows[i], value=age)
        elif i and age != ages[i - 1] + 1:
            out.add(
                "age", "ages must follow each other by one year", "Sort the rows and fill gaps.", row=rows[i], value=age
            )


def _rate(value: float, row: int, *, probability: bool, out: RowFaults) -> float:
    if math.isnan(value):
        return value
    if value < 0 or (probability and value > 1):
        what = "a yearly probability must lie in [0, 1]" if probability else "a yearly rate cannot be negative"
        out.add("value", what, "Correct the number or the unit of the table.", row=row, value=value)
    elif probability and value == 1:
        remedy = 'End the table one row earlier and set beyond = "hold".'
        out.add("value", "a yearly probability of 1 has no finite rate", remedy, row=row, value=value)
    elif probability:
        return -math.log1p(-value)
    return value


def read_population(
    table: Csv, *, levels: Mapping[str, tuple[str, ...]], within: Mapping[str, tuple[float, float]], faults: FaultList
) -> dict[str, tuple[float, ...]]:
    """Columns of the attributes named in ``levels`` (() = numeric); categories become codes."""
    out = RowFaults(table.file, faults)
    rows: dict[str, tuple[float, ...]] = {}
    for name, names in levels.items():
        if not names:
            rows[name] = numbers(table, name, out=out)
            low, high = within.get(name, (-math.inf, math.inf))
            for row, v in zip(table.rows, rows[name], strict=True):
                if v < low or v > high:
                    out.add(
                        name, f"outside [{low:g}, {high:g}]", "Leave the row out or widen within.", row=row, value=v
                    )
            continue
        codes = {level: float(i) for i, level in enumerate(names)}
        for row, text in zip(table.rows, table.cells[name], strict=True):
            if text not in codes:
                out.add(
                    name, f"{text!r} is not a level of {name}", nearest(text, names), row=row, value=text or "blank"
                )
        rows[name] = tuple(codes.get(t, math.nan) for t in table.cells[name])
    out.finish()
    return rows


@dataclass(frozen=True, slots=True)
class Episodes:
    """Sojourns of patients: source, target ("" = censored), entry, exit, observed_from, in the file's time unit."""

    table: Csv
    source: tuple[str, ...]
    target: tuple[str, ...]
    entry: tuple[float, ...]
    exit: tuple[float, ...]
    observed_from: tuple[float, ...]


EPISODE_COLUMNS = ("patient", "from", "to", "entry", "exit")


def read_episodes(table: Csv, *, states: tuple[str, ...], faults: FaultList) -> Episodes | None:
    """Check and read a file of episodes; None after a fault."""
    out = RowFaults(table.file, faults)
    before = len(faults.faults)
    entry, exit_ = numbers(table, "entry", out=out), numbers(table, "exit", out=out)
    observed = entry
    if "observed_from" in table.cells:
        raw = numbers(table, "observed_from", out=out, blank=-math.inf)
        observed = tuple(max(o, e) for o, e in zip(raw, entry, strict=True))
    target = tuple("" if t.casefold() in ("", "censored") else t for t in table.cells["to"])
    for i, row in enumerate(table.rows):
        if table.cells["patient"][i] == "":
            out.add("patient", "the patient is not named", "Fill the cell.", row=row)
        for column, state in (("from", table.cells["from"][i]), ("to", target[i])):
            if state not in states and (state or column == "from"):
                out.add(column, f"unknown state {state!r}", nearest(state, states), row=row)
        if exit_[i] < entry[i]:
            found = f"{entry[i]:g} to {exit_[i]:g}"
            out.add(
                "exit",
                "the episode ends before it starts (negative sojourn)",
                "Correct entry or exit.",
                row=row,
                value=found,
            )
        elif entry[i] < 0:
            out.add(
                "entry", "time cannot be negative", "Count time from the start of follow-up.", row=row, value=entry[i]
            )
        elif exit_[i] == entry[i] and target[i]:
            remedy = "Give it a length, for example half a time unit, and say so in the source."
            out.add(
                "exit", "a transition at the moment of entry (sojourn of length zero)", remedy, row=row, value=exit_[i]
            )
    _overlaps(table, entry, exit_=exit_, out=out)
    out.finish()
    if len(faults.faults) > before:
        return None
    return Episodes(table, table.cells["from"], target, entry, exit_, observed)


def _overlaps(table: Csv, entry: tuple[float, ...], *, exit_: tuple[float, ...], out: RowFaults) -> None:
    latest: dict[str, tuple[float, int]] = {}
    for i in sorted(range(len(entry)), key=lambda i: (entry[i], exit_[i])):
        patient = table.cells["patient"][i]
        end, row = latest.get(patient, (-math.inf, 0))
        if entry[i] < end - 1e-9 * max(1.0, abs(end)):
            out.add("entry", f"patient {patient}: the episode overlaps the one in row {row}",
                    "Episodes of a patient follow each other.", row=table.rows[i], value=entry[i])  # fmt: skip
        if exit_[i] > end:
            latest[patient] = (exit_[i], table.rows[i])


def categories(texts: Sequence[str]) -> tuple[str, ...]:
    """Levels of a column, sorted, if any filled cell is not a number; else ()."""
    if all(number(t) is not None for t in texts if t):
        return ()
    return tuple(sorted(set(texts)))
