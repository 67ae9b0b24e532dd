"""Stored fits: read when data and settings hash the same, made and written (by atomic rename) when they do not."""

from __future__ import annotations

import contextlib
import json
import os
import tempfile
from collections.abc import Sequence
from pathlib import Path
from typing import Protocol

import numpy as np
import numpy.typing as npt

from microsim.errors import FitError
from microsim.fitting.estimate import fit_family
from microsim.fitting.fit import Fit

F = npt.NDArray[np.float64]
VERSION = 2  # of the estimation code: raise it when estimates may change


class Task(Protocol):
    """One distribution to fit; see ``study.fit_task.FitTask``."""

    @property
    def name(self) -> str: ...
    @property
    def family(self) -> str: ...
    @property
    def source(self) -> str: ...
    @property
    def target(self) -> str: ...
    @property
    def unit(self) -> str: ...
    @property
    def times(self) -> F: ...
    @property
    def events(self) -> npt.NDArray[np.bool_]: ...
    @property
    def entry(self) -> F: ...
    @property
    def covariates(self) -> F: ...
    @property
    def coefficient_names(self) -> Sequence[str]: ...
    @property
    def to_study_unit(self) -> float: ...
    @property
    def content_hash(self) -> str: ...


def make_fit(task: Task) -> Fit:
    """Fit a task; a FitError names the fit and its transition."""
    try:
        return fit_family(
            task.times,
            task.events,
            family=task.family,
            entry=task.entry,
            covariates=task.covariates,
            covariate_names=task.coefficient_names,
        )
    except FitError as error:
        raise FitError(f"fit {task.name} ({task.source} to {task.target}): {error}") from None


def _read(file: Path) -> Fit | None:
    """The stored fit, or None if there is none or it is damaged."""
    try:
        return Fit.from_dict(json.loads(file.read_text(encoding="utf-8")))
    except (OSError, ValueError, TypeError, KeyError):
        return None


def _write(file: Path, fit: Fit) -> None:
    """Whole or not at all: a scratch file beside the target, then renamed."""
    file.parent.mkdir(parents=True, exist_ok=True)
    with tempfile.NamedTemporaryFile("w", dir=file.parent, suffix=".part", delete=False, encoding="utf-8") as scratch:
        part = Path(scratch.name)
    try:
        part.write_text(json.dumps(fit.to_dict()), encoding="utf-8")
        os.replace(part, file)
    finally:
        part.unlink(missing_ok=True)


def fit_or_read(task: Task, folder: Path | None) -> Fit:
    """The fit of a task, from ``folder`` if stored there. A folder that cannot be written is no obstacle."""
    if folder is None:
        return make_fit(task)
    file = folder / f"{task.name}-{task.content_hash[:32]}-{VERSION}.json"
    known = _read(file)
    if known is not None and known.converged:
        return known
    fit = make_fit(task)
    # a fit that cannot be stored is still a fit
    with contextlib.suppress(OSError):
        _write(file, fit)
    return fit
