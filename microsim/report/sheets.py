"""Tables of a result into sheets of printed cells: which column goes where, how it is headed, how it is formatted.

Text only, no markup; a row of one cell is a heading within the sheet.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import pandas as pd

from microsim.report.frames import (
    BASES,
    BY_CONSTRUCTION,
    CYCLE_RULES,
    NO_BREAK_HYPHEN,
    USES,
    at_stated_rule,
    by_construction,
    currency_of,
    decimals_for,
    fixed,
    flat,
    label,
    missing,
    model_label,
    money,
    number,
    ordered,
    outcome_group,
    outcome_label,
    plain,
    quantity_label,
    rows_of,
    stated_rule,
    trimmed,
    verdict_use,
    with_error,
)
from microsim.report.inputs import ResultLike, table

Row = tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Sheet:
    """caption; column headings; rows (one cell = heading across); ``left``: leading columns that hold words; note;
    wide: better printed on a page turned sideways."""

    caption: str
    columns: Row
    rows: tuple[Row, ...]
    left: int = 1
    note: str = ""
    wide: bool = False


@dataclass(frozen=True, slots=True)
class Pick:
    """What a model picks at a threshold; ``look`` numbers the strategy for its pattern."""

    strategy: str
    look: int
    resolved: bool
    lead: str


def choice_strip(result: ResultLike) -> tuple[list[float], list[tuple[str, list[Pick | None]]]]:
    """Thresholds, and for every model what it picks at each of them (None where it says nothing)."""
    frame = table(result, "choice")
    levels = [float(t) for t in ordered(frame["threshold"])]
    looks = {name: index for index, name in enumerate(ordered(table(result, "net_benefit")["strategy"]))}
    strip = []
    for model in ordered(frame["model"]):
        mine = frame[frame["model"] == model]
        picks: dict[float, Pick] = {}
        for row in rows_of(mine):
            lead = with_error(row.lead, row.lead_se)
            name = label(result, "strategies", row.strategy)
            picks[float(row.threshold)] = Pick(name, looks.get(row.strategy, 0) % 6, bool(row.resolved), lead)
        strip.append((model_label(model), [picks.get(level) for level in levels]))
    return levels, strip


def _lookup(frame: pd.DataFrame, **where: object) -> Any | None:
    for column, value in where.items():
        frame = frame[frame[column] == value]
    return next(iter(rows_of(frame)), None)


def _estimate(frame: pd.DataFrame, *, signed: bool = False, **where: object) -> str:
    row = _lookup(frame, **where)
    return "–" if row is None else with_error(row.mean, row.standard_error, signed=signed)


def thresholds(result: ResultLike) -> list[float]:
    return [float(t) for t in ordered(table(result, "net_benefit")["threshold"])]


def _error_note(result: ResultLike, *, more: str = "") -> str:
    return f"Standard errors in brackets. Money in {currency_of(result)}; costs and QALYs are discounted{more}."


def status_text(row: Any | None) -> str:
    """The incremental cost-effectiveness ratio where there is one, else the status in words."""
    if row is None:
        return "–"
    return str(row.status) if missing(row.icer) else money(row.icer)


def decision_sheet(result: ResultLike) -> Sheet:
    """Cost, QALYs, ICER or status, net benefit per threshold: models beneath one another within each strategy."""
    rule, levels = stated_rule(result), thresholds(result)
    incremental, outcomes = table(result, "incremental"), at_stated_rule(table(result, "outcomes"), stated_rule(result))
    benefit = at_stated_rule(table(result, "net_benefit"), rule)
    rows: list[Row] = []
    for strategy in ordered(incremental["strategy"]):
        rows.append((label(result, "strategies", strategy),))
        for model in ordered(incremental["model"]):
            row = _lookup(incremental, strategy=strategy, model=model)
            cells = [
                _estimate(outcomes, strategy=strategy, model=model, outcome=name) for name in ("cost_disc", "qaly_disc")
            ]
            if row is not None:
                cells = [given if given != "–" else number(own) for given, own in zip(cells, row[2:4], strict=True)]
            values = [_benefit(benefit, strategy, model, level) for level in levels]
            rows.append((model_label(model), *cells, status_text(row), *values))
    heads = ("Model", "Cost", "QALYs", "ICER or status", *(f"Net benefit at {money(t)}" for t in levels))
    note = f"{_error_note(result)} Cohorts {BASES.get(rule, rule)}."
    return Sheet("Cost, effect and net benefit of each strategy under each model.", heads, tuple(rows), note=note)


def _benefit(frame: pd.DataFrame, strategy: object, model: object, level: float) -> str:
    row = _lookup(frame, strategy=strategy, model=model, threshold=level)
    return "–" if row is None else with_error(row.net_benefit, row.standard_error)


def increment_sheet(result: ResultLike) -> Sheet:
    """Increments over the comparator, same layout."""
    rule, levels = stated_rule(result), thresholds(result)
    frame = at_stated_rule(table(result, "increments"), rule)
    benefit = at_stated_rule(table(result, "net_benefit"), rule)
    rows: list[Row] = []
    for strategy, comparator in ordered(zip(frame["strategy"], frame["comparator"], strict=True)):
        rows.append(
            (f"{label(result, 'strategies', strategy)} against {label(result, 'strategies', comparator)}",),
        )
        for model in ordered(frame["model"]):
            cells = [
                _estimate(frame, signed=True, strategy=strategy, model=model, outcome=name)
                for name in ("cost_disc", "qaly_disc", "ly")
            ]
            for level in levels:
                row = _lookup(benefit, strategy=strategy, model=model, threshold=level)
                cells.append("–" if row is None else with_error(row.increment, row.increment_se, signed=True))
            rows.append((model_label(model), *cells))
    heads = ("Model", "Cost", "QALYs", "Life-years", *(f"Net benefit at {money(t)}" for t in levels))
    note = _error_note(result, more="; life-years are not")
    return Sheet("Increments over the comparator under each model.", heads, tuple(rows), note=note)


def verdict_sheet(result: ResultLike) -> Sheet:
    rows = tuple(
        (
            label(result, "strategies", r.strategy),
            money(r.threshold),
            with_error(r.gap, r.se, signed=True),
            f"{fixed(r.lower, decimals_for(r.se))} to {fixed(r.upper, decimals_for(r.se))}",
            f"±{money(r.tolerance)}",
            str(r.verdict),
            "–" if missing(r.patients_needed) or pd.isna(r.patients_needed) else f"{int(r.patients_needed):,}",
        )
        for r in rows_of(table(result, "verdict"))
    )
    heads = ("Strategy", "Threshold", "Gap (SE)", "Interval", "Tolerance", "Verdict", "Patients to resolve")
    note = "Adequate: the interval lies inside the tolerance. Not adequate: outside it. Else unresolved."
    return Sheet("The equivalence test behind the verdict.", heads, rows, note=note)


def _term(row: Any, name: str) -> str:
    if by_construction(row, name):
        return BY_CONSTRUCTION
    return with_error(getattr(row, name), getattr(row, f"{name}_se"), signed=True)


def _split(row: Any) -> Row:
    places = decimals_for(row.total_se)
    terms = (_term(row, name) for name in ("memory", "carrying", "cycle", "total"))
    return (fixed(row.full, places), fixed(row.cohort, places), *terms)


_SPLIT_HEADS = ("Individual", "Cohort", "Memory", "Carrying", "Cycle", "Total gap")


def gap_sheet(result: ResultLike) -> Sheet:
    """Split of incremental net benefit under the stated cycle rule, every use of rates."""
    frame, rule = table(result, "gap"), stated_rule(result)
    frame = frame[frame["threshold"].notna() & (frame["cycle_rule"] == rule)]
    rows: list[Row] = []
    for strategy in ordered(frame["strategy"]):
        rows.append((label(result, "strategies", strategy),))
        for r in rows_of(frame[frame["strategy"] == strategy]):
            rows.append((money(r.threshold), USES.get(str(r.use), str(r.use)), *_split(r)))
    heads = ("Threshold", "Rates", *_SPLIT_HEADS)
    note = (
        "Individual = cohort + memory + carrying + cycle. "
        f"Terms that are zero by the way the models are made read “{BY_CONSTRUCTION}”."
    )
    return Sheet("Gap in incremental net benefit, split by cause.", heads, tuple(rows), left=2, note=note)


_INCREMENTAL = "incremental "
_NOT_SHOWN = ("entries:",)


def outcome_gap_sheet(result: ResultLike) -> Sheet:
    """Split of the other quantities, stated cycle rule, the use the verdict rests on."""
    frame, rule, use = table(result, "gap"), stated_rule(result), verdict_use(result)
    frame = frame[frame["threshold"].isna() & (frame["cycle_rule"] == rule) & (frame["use"] == use)]
    rows: list[Row] = []
    for strategy in ordered(frame["strategy"]):
        rows.append((label(result, "strategies", strategy),))
        for r in rows_of(frame[frame["strategy"] == strategy]):
            name = str(r.quantity)
            if name.startswith(_INCREMENTAL) or name.startswith(_NOT_SHOWN):
                continue
            rows.append((quantity_label(result, name), *_split(r)))
        steps = [r for r in rows_of(frame[frame["strategy"] == strategy]) if str(r.quantity).startswith(_INCREMENTAL)]
        shown = [r for r in steps if not str(r.quantity).removeprefix(_INCREMENTAL).startswith(_NOT_SHOWN)]
        if shown:
            rows.append((f"{label(result, 'strategies', strategy)}, increment over the comparator",))
            rows += [(quantity_label(result, str(r.quantity).removeprefix(_INCREMENTAL)), *_split(r)) for r in shown]
    caption = f"Gap in other quantities, split by cause; {USES.get(use, use)}."
    note = "Arrivals in states, and every use and cycle rule, are in the table “gap” of the result folder."
    return Sheet(caption, ("Quantity", *_SPLIT_HEADS), tuple(rows), note=note)


def cycle_sheet(result: ResultLike) -> Sheet:
    """Total gap in incremental net benefit by use and cycle rule, thresholds side by side."""
    frame = table(result, "gap")
    frame = frame[frame["threshold"].notna()]
    levels = ordered(frame["threshold"])
    rows: list[Row] = []
    for strategy in ordered(frame["strategy"]):
        rows.append((label(result, "strategies", strategy),))
        for use, rule in ordered(zip(frame["use"], frame["cycle_rule"], strict=True)):
            found = [_lookup(frame, strategy=strategy, use=use, cycle_rule=rule, threshold=t) for t in levels]
            cells = ["–" if row is None else _term(row, "total") for row in found]
            rows.append((USES.get(use, use), CYCLE_RULES.get(rule, rule), *cells))
    heads = ("Rates", "Cycle rule", *(f"Total gap at {money(t)}" for t in levels))
    return Sheet("Total gap in incremental net benefit under every cycle rule.", heads, tuple(rows), left=2)


def outcome_sheets(result: ResultLike) -> list[Sheet]:
    """One sheet a strategy: every outcome under every model and cycle rule."""
    frame = table(result, "outcomes")
    kinds = ordered(zip(frame["model"], frame["cycle_rule"], strict=True))
    heads = ("Outcome", *(_kind_head(model, rule) for model, rule in kinds))
    sheets = []
    for strategy in ordered(frame["strategy"]):
        mine = frame[frame["strategy"] == strategy]
        cells = {(r.outcome, r.model, r.cycle_rule): r for r in rows_of(mine)}
        rows = _outcome_rows(result, mine, cells, kinds)
        caption = f"All outcomes per patient, {label(result, 'strategies', strategy)}."
        sheets.append(Sheet(caption, heads, rows, wide=True, note="Standard errors in brackets."))
    return sheets


def _kind_head(model: str, rule: str) -> str:
    short = model_label(model).replace("Memoryless cohort, ", "").capitalize()
    named = CYCLE_RULES.get(rule, rule).removeprefix("cycles, ").replace("-", NO_BREAK_HYPHEN)
    return short + (f": {named}" if rule else "")


def _outcome_rows(
    result: ResultLike, frame: pd.DataFrame, cells: dict[Any, Any], kinds: Iterable[tuple[str, str]]
) -> tuple[Row, ...]:
    rows: list[Row] = []
    heading = ""
    units = dict(zip(frame["outcome"], frame["unit"], strict=True))
    for outcome in ordered(frame["outcome"]):
        group = outcome_group(outcome)
        if group != heading:
            heading = group
            rows.append((group if group.startswith("Survival") else f"{group} ({units[outcome]})",))
        found = [cells.get((outcome, model, rule)) for model, rule in kinds]
        printed = ("–" if r is None else with_error(r.mean, r.standard_error) for r in found)
        rows.append((outcome_label(result, outcome), *printed))
    return tuple(rows)


def rate_sheet(result: ResultLike) -> Sheet:
    """One row an arc, strategy and use; a rate that varies over time shows its first and last value."""
    frame = table(result, "rates")
    rows: list[Row] = []
    for keys, part in frame.groupby(["clock", "source", "target"], sort=False):
        clock, source, target = keys
        ends = f"{label(result, 'states', source)} to {label(result, 'states', target)}"
        rows.append((f"{label(result, 'clocks', clock)}: {ends}",))
        for (strategy, use), cells in part.groupby(["strategy", "use"], sort=False):
            cells = cells.sort_values("time_from")
            values = [number(v) for v in cells["rate"]]
            shown = values[0] if len(values) == 1 else f"{values[0]} … {values[-1]} ({len(values)} cells)"
            rows.append((
                label(result, "strategies", strategy), USES.get(str(use), str(use)), shown,
                number(cells["events"].sum(), figures=5), number(cells["exposure"].sum(), figures=5),
            ))  # fmt: skip
    unit = result.summary.get("time_unit", "")
    heads = ("Strategy", "Rates", f"Rate per {unit}", "Expected events", f"Exposure ({unit}s)")
    return Sheet("Rates projected from the individual-level paths.", heads, tuple(rows), left=2)


def fit_sheet(result: ResultLike) -> Sheet:
    rows = tuple(
        (
            item.label or name,
            item.fit.family,
            _pairs(item.fit.params),
            _pairs(item.fit.coefficients) or "none",
            f"{item.fit.n:,} / {item.fit.n_events:,}",
            number(item.fit.loglik, figures=6),
            number(item.fit.aic, figures=6),
            number(item.fit.bic, figures=6),
            "yes" if item.fit.converged else "no",
        )
        for name, item in result.fits.items()
    )
    heads = ("Fit", "Family", "Parameters", "Coefficients", "Stays / events", "Log-lik.", "AIC", "BIC", "Converged")
    return Sheet("Fitted sojourn-time distributions.", heads, rows, left=4)


def _pairs(values: Any) -> str:
    return ", ".join(f"{name} {trimmed(value)}" for name, value in values.items())


def fit_warnings(result: ResultLike) -> list[str]:
    return [f"{item.label or name}: {text}" for name, item in result.fits.items() for text in item.fit.warnings]


def defaults_sheet(result: ResultLike) -> Sheet:
    rows = tuple((str(key), plain(value)) for key, value in result.summary.get("defaults", ()))
    return Sheet("Defaults taken where the study is silent.", ("Setting", "Value taken"), rows, left=2)


def settings_sheet(result: ResultLike) -> Sheet:
    rows = tuple(flat(result.summary.get("settings", {})))
    return Sheet("Settings of this run.", ("Setting", "Value"), rows, left=2)


_SHOWN_ELSEWHERE = ("settings", "defaults", "fits")


def manifest_sheet(result: ResultLike) -> Sheet:
    note = "The same study, seed and version give the same numbers, for any number of threads."
    rows = tuple(flat({key: value for key, value in result.manifest.items() if key not in _SHOWN_ELSEWHERE}))
    return Sheet("What made these numbers.", ("Entry", "Value"), rows, left=2, note=note)
