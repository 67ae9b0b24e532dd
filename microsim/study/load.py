"""A study folder -> Study: everything read, parsed and checked once, all faults together in one InputError.

Writes nothing. The study keeps no path of the machine: only its folder's name and the content of its files.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from microsim.errors import FaultList
from microsim.study import settings
from microsim.study.bind import check_numbers
from microsim.study.context import STUDY_FILE, Context, content_hash, decode
from microsim.study.coverage import check_tables, check_use_of_fits
from microsim.study.dimensions import YEARS
from microsim.study.locate import scan_lines
from microsim.study.parts import State, Strategy, Study
from microsim.study.read_fits import declare_coefficients, parse_fits
from microsim.study.read_hazards import HazardReader
from microsim.study.read_inputs import declare_inputs, parse_inputs
from microsim.study.read_pathway import check_graph, check_name, parse_clocks, parse_states
from microsim.study.read_people import check_rows, correlation_matrix, parse_attributes, read_rows
from microsim.study.read_strategies import check_shared_patients, parse_strategies
from microsim.study.schema import StudyFile
from microsim.study.validate import parse_toml, validate


def load_study(path: str | Path) -> Study:
    """Read a study from its folder or its study.toml. Raises InputError with every fault of the whole study."""
    where = Path(path)
    file = where / STUDY_FILE if where.is_dir() else where
    faults = FaultList()
    if not file.is_file():
        faults.add(
            file.name, "study", "there is no such file", f"Name a folder that holds {STUDY_FILE}.", value=where.name
        )
        faults.raise_if_any()
    text = decode(file.read_bytes())
    if text is None:
        faults.add(STUDY_FILE, "study", "the file is not UTF-8 text", "Save it in UTF-8.")
        faults.raise_if_any()
        text = ""
    raw = parse_toml(text, faults)
    faults.raise_if_any()
    lines = scan_lines(text)
    study_file = validate(raw or {}, lines=lines, faults=faults)
    if study_file is None:
        faults.raise_if_any()
        raise AssertionError("a study that is not valid has faults")
    ctx = Context(root=file.parent, lines=lines, faults=faults)
    ctx.silence(faults.faults)
    ctx.contents[STUDY_FILE] = text
    study = _build(ctx, study_file, folder=file.resolve().parent.name)
    faults.raise_if_any()
    return study


def _build(ctx: Context, text: StudyFile, *, folder: str) -> Study:
    ctx.study_unit, ctx.years_per_unit = text.time, YEARS[text.time]
    ctx.money = (text.currency.split() or ["EUR"])[0]
    if not text.currency.split():
        ctx.fault("currency", "the currency is not named", 'Write for example "EUR 2026".')
    ctx.states = tuple(text.states)
    inputs_table = declare_inputs(ctx, text.inputs)
    declare_coefficients(ctx, text.fits)
    rows_table = read_rows(ctx, text.population.from_)
    columns = frozenset(rows_table.cells) if rows_table is not None else frozenset()
    _check_names(ctx, text)
    attributes = parse_attributes(ctx, text.attributes, columns=columns)
    inputs = parse_inputs(ctx, inputs_table)
    hazards = HazardReader(ctx, text.fits, attributes)
    states = parse_states(ctx, text.states)
    clocks = parse_clocks(ctx, text.clocks, hazards=hazards)
    strategies = parse_strategies(ctx, text.strategies, states=states, clocks=clocks, hazards=hazards)
    check_graph(ctx, states, clocks=clocks)
    check_shared_patients(ctx, strategies, inputs=inputs, attributes=attributes, states=states)
    fits = parse_fits(ctx, text.fits)
    horizon = settings.length(ctx, "horizon", value=text.horizon)
    study = Study(
        text=text, folder=folder, content_hash="", defaults=(), warnings=(), lines=ctx.lines, files=(),
        time_unit=text.time, years_per_unit=ctx.years_per_unit, horizon=horizon, decision=settings.decision(ctx, text),
        discounting=settings.discounting(ctx, text), cohort=settings.cohort(ctx, text, horizon=horizon),
        patients=text.run.patients,
        seed=text.run.seed, inputs_file=text.inputs or "inputs.csv", inputs=inputs, attributes=attributes,
        correlation=correlation_matrix(ctx, text.population, attributes=attributes),
        rows=check_rows(ctx, rows_table, attributes=attributes, tables=text.attributes),
        states=states, clocks=clocks, fits=fits,
        strategies=strategies, categories=_categories(states, strategies),
    )  # fmt: skip
    return _finish(ctx, study)


def _finish(ctx: Context, study: Study) -> Study:
    """The checks that need the study's numbers, then what the context gathered on the way."""
    found = FaultList()
    population = check_numbers(study, found).population
    ctx.adopt(found.faults)
    check_tables(ctx, study, population=population)
    check_use_of_fits(ctx, study)
    settings.tell_defaults(ctx, study.text)
    return replace(
        study, content_hash=content_hash(ctx.contents), defaults=tuple(ctx.defaults), warnings=tuple(ctx.warnings),
        files=tuple(sorted(ctx.contents)),
    )  # fmt: skip


def _check_names(ctx: Context, text: StudyFile) -> None:
    """States, inputs, coefficients and attributes share one space of names; the others only need to be names."""
    for what, names in (
        ("state", text.states),
        ("clock", text.clocks),
        ("fit", text.fits),
        ("attribute", text.attributes),
    ):
        for name in names:
            key = f"{what}s.{name}"
            check_name(ctx, name, key=key, what=what)
            if what in ("state", "attribute") and name in ctx.symbols:
                ctx.fault(key, f"the name {name} is already an input or a coefficient", "Rename one of the two.")
            if what == "attribute" and name in text.states:
                ctx.fault(key, f"the name {name} is already a state", "Rename one of the two.")


def _categories(states: tuple[State, ...], strategies: tuple[Strategy, ...]) -> tuple[str, ...]:
    """Cost categories in the order in which the study names them."""
    seen: dict[str, None] = {}
    for s in states:
        seen.update(dict.fromkeys([*s.costs, *s.entry_costs]))
    for strategy in strategies:
        seen.update(dict.fromkeys(d.path[-1] for d in strategy.differences if "cost" in d.path))
        seen.update(dict.fromkeys(strategy.once))
    return tuple(seen)
