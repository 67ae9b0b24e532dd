"""Episodes of a study -> the fitting jobs it asks for, as read-only arrays in each fit's own time unit.

Knows the study's data only; how a distribution is fitted is another room's matter.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from microsim.study.parts import Study

F = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class FitTask:
    """One distribution to fit to one transition.

    times: float64[n] end of observation and events: bool[n] whether the transition ended it; entry: float64[n] where
    observation began (left truncation). For time "sojourn" both count from entry to the state, for "elapsed" from
    zero. covariates: float64[n, p]. All times in ``unit``; multiply by ``to_study_unit`` for study time units.
    content_hash: sha256 of data and settings, so an unchanged fit can be reused.
    """

    name: str
    family: str
    source: str
    target: str
    unit: str
    time: str
    times: F
    events: npt.NDArray[np.bool_]
    entry: F
    covariates: F
    coefficient_names: tuple[str, ...]
    n_dropped_note: str
    to_study_unit: float
    content_hash: str = ""


def sealed(task: FitTask) -> FitTask:
    """The task with read-only arrays and its content hash."""
    digest = hashlib.sha256()
    settings = (task.family, task.source, task.target, task.unit, task.time, *task.coefficient_names)
    digest.update("\x1f".join(settings).encode())
    for array in (task.times, task.events, task.entry, task.covariates):
        array.setflags(write=False)
        digest.update(f"|{array.shape}|".encode() + np.ascontiguousarray(array).astype("<f8").tobytes())
    return replace(task, content_hash=digest.hexdigest())


def fit_tasks(study: Study) -> tuple[FitTask, ...]:
    """Every fit of the study, in the order of study.toml."""
    return tuple(f.task for f in study.fits if f.task is not None)
