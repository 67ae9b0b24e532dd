"""The main job from end to end: study -> fits -> simulation -> cohort models -> comparison -> Result.

Calls the rooms in order and keeps what each hands over; computes nothing of its own and writes nothing except, when
given a folder, fits for reuse.
"""

from __future__ import annotations

import os
import platform
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from importlib import metadata
from pathlib import Path
from typing import Any

import pandas as pd

import microsim
from microsim.comparison.ladder import Comparison, compare
from microsim.errors import Fault, InputError
from microsim.fitting.transition import FittedTransition, fit_transition
from microsim.records.simulation import SimulationRecord
from microsim.study.bind import bind
from microsim.study.bound import BoundStudy
from microsim.study.fit_task import fit_tasks
from microsim.study.load import load_study
from microsim.study.parts import Study
from microsim.study.pathway import PathwayGraph, pathway

LIBRARIES = ("numpy", "scipy", "pandas", "numba", "llvmlite", "pyarrow", "pydantic", "matplotlib")
Stage = Callable[[str, int, int], None]


@dataclass(frozen=True, slots=True)
class Result:
    """Everything one run found.

    tables: tidy frames by name (README lists them). summary: plain data ready for JSON. fits: fit name -> transition
    with its curve. manifest: what is needed to repeat the run, and how long it took.
    """

    study: Study
    bound: BoundStudy
    record: SimulationRecord
    comparison: Comparison
    fits: Mapping[str, FittedTransition]
    pathway: PathwayGraph
    tables: Mapping[str, pd.DataFrame]
    summary: Mapping[str, Any]
    manifest: Mapping[str, Any]


@dataclass(slots=True)
class _Clock:
    """Seconds per stage."""

    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        begin = time.perf_counter()
        yield
        self.seconds[name] = round(time.perf_counter() - begin, 3)


def check_settings(study: Study, patients: int | None, seed: int | None, threads: int | None) -> tuple[int, int, int]:
    """Numbers of the run, from the call or the study; InputError if out of range."""
    n = study.patients if patients is None else patients
    s = study.seed if seed is None else seed
    k = (os.cpu_count() or 1) if threads is None else threads
    faults = []
    if not 200 <= n < 2**32:
        faults.append(
            Fault("command line", "--patients", "out of range", "Give 200 to 4,294,967,295 patients.", str(n))
        )
    if not 0 <= s < 2**64:
        faults.append(
            Fault("command line", "--seed", "out of range", "Give a whole number from 0 to 2**64 - 1.", str(s))
        )
    if not 1 <= k <= 1024:
        faults.append(Fault("command line", "--threads", "out of range", "Give 1 to 1024 threads.", str(k)))
    if faults:
        raise InputError(faults)
    return n, s, k


def _labels(study: Study) -> dict[str, dict[str, str]]:
    return {
        "strategies": {x.name: x.label or x.name for x in study.strategies},
        "states": {x.name: x.label or x.name for x in study.states},
        "clocks": {x.name: x.label or x.name for x in study.clocks},
    }


def _records(table: pd.DataFrame) -> list[dict[str, Any]]:
    """Rows as plain data; a missing value becomes None."""
    plain = table.astype(object).where(table.notna(), None)
    return [{str(k): v for k, v in row.items()} for row in plain.to_dict("records")]


def _fits_table(fits: Mapping[str, FittedTransition]) -> pd.DataFrame:
    """One row per estimate: natural value, and working-scale value with standard error."""
    columns = [
        "fit",
        "source",
        "target",
        "family",
        "time_unit",
        "name",
        "value",
        "working_name",
        "working",
        "working_se",
    ]
    columns += ["loglik", "aic", "bic", "subjects", "events"]
    rows = []
    for name, f in fits.items():
        errors = f.fit.standard_errors
        values = {**f.fit.params, **f.fit.coefficients}
        for (natural, value), working_name, working in zip(
            values.items(), f.fit.working_names, f.fit.working, strict=True
        ):
            head = (name, f.source, f.target, f.fit.family, f.unit, natural, value, working_name, working)
            quality = (errors[working_name], f.fit.loglik, f.fit.aic, f.fit.bic, f.fit.n, f.fit.n_events)
            rows.append((*head, *quality))
    return pd.DataFrame(rows, columns=columns)


def _summary(
    study: Study, comparison: Comparison, tables: Mapping[str, pd.DataFrame], settings: Mapping[str, Any]
) -> dict[str, Any]:
    """The run as plain data; README lists the keys."""
    return {
        "title": study.title,
        "invented": study.text.invented,
        "headline": comparison.verdict.headline,
        "sentences": list(comparison.verdict.sentences),
        "cautions": list(comparison.cautions),
        "currency": study.text.currency,
        "time_unit": study.time_unit,
        "settings": dict(settings),
        "labels": _labels(study),
        "defaults": [list(pair) for pair in study.defaults],
        "warnings": list(study.warnings),
        **{name: _records(tables[name]) for name in JSON_TABLES},
    }


JSON_TABLES = ("verdict", "choice", "net_benefit", "incremental", "outcomes", "increments", "gap", "fits")


def run(
    study: Study | str | Path,
    *,
    patients: int | None = None,
    seed: int | None = None,
    threads: int | None = None,
    fits_folder: Path | None = None,
    log: Any = None,
    outcomes: Any = None,
    stage: Stage | None = None,
) -> Result:
    """Run the main job.

    study: from ``load_study``, or a path. patients, seed: default to the study's; threads: default to all cores (the
    numbers do not depend on it). fits_folder: where fits are stored and reused. log, outcomes: sinks as in
    ``engine.run.Wants``. stage(name, done, total) reports progress. Raises InputError, FitError, SimulationError,
    CohortError.
    """
    if not isinstance(study, Study):
        study = load_study(study)
    n, s, k = check_settings(study, patients, seed, threads)
    clock = _Clock()
    tell = stage or (lambda name, done, total: None)
    with clock.stage("fit"):
        tasks = fit_tasks(study)
        fits: dict[str, FittedTransition] = {}
        for i, task in enumerate(tasks):
            tell("fit", i, len(tasks))
            fits[task.name] = fit_transition(task, fits_folder)
    with clock.stage("bind"):
        bound = bind(study, {name: f.in_study_units for name, f in fits.items()})
    with clock.stage("simulate"):
        from microsim.engine.run import Wants, simulate

        record = simulate(
            bound,
            patients=n,
            seed=s,
            threads=k,
            wants=Wants(log=log, outcomes=outcomes),
            progress=lambda done, total: tell("simulate", done, total),
        )
    with clock.stage("compare"):
        tell("compare", 0, 1)
        comparison = compare(bound, record)
    tables = {**comparison.tables, "fits": _fits_table(fits)}
    settings = {"patients": n, "seed": s, "cycle": bound.cohort.cycle, "correction": bound.cohort.correction}
    manifest = {
        "study": study.folder,
        "study_hash": study.content_hash,
        "settings": settings,
        "threads": k,
        "defaults": [list(pair) for pair in study.defaults],
        "versions": {
            "microsim": microsim.__version__,
            "python": platform.python_version(),
            **{name: metadata.version(name) for name in LIBRARIES},
        },
        "fits": {name: f.fit.to_dict() for name, f in fits.items()},
        "seconds": clock.seconds,
    }
    return Result(
        study=study,
        bound=bound,
        record=record,
        comparison=comparison,
        fits=fits,
        pathway=pathway(study),
        tables=tables,
        summary=_summary(study, comparison, tables, settings),
        manifest=manifest,
    )
