"""Stored fits are reused for the same data and settings, and only then."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from microsim.errors import FitError
from microsim.fitting import store
from microsim.fitting.store import fit_or_read
from microsim.study.fit_task import FitTask, sealed


def _task(**changes: object) -> FitTask:
    rng = np.random.default_rng(1)
    t = rng.weibull(0.8, 200) * 30
    task = FitTask(
        name="stay", family="weibull", source="Home", target="Hospital", unit="day", time="sojourn",
        times=np.minimum(t, 40.0), events=t <= 40.0, entry=np.zeros(200), covariates=rng.normal(size=(200, 1)),
        coefficient_names=("b",), n_dropped_note="", to_study_unit=1 / 365.25,
    )  # fmt: skip
    return sealed(replace(task, **changes))  # type: ignore[arg-type]


def test_a_stored_fit_is_read_and_not_made_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    first = fit_or_read(_task(), tmp_path)
    monkeypatch.setattr(store, "fit_family", None)
    assert fit_or_read(_task(), tmp_path) == first
    assert [f.suffix for f in tmp_path.iterdir()] == [".json"]


def test_other_data_or_settings_are_fitted_anew(tmp_path: Path) -> None:
    first = fit_or_read(_task(), tmp_path)
    assert fit_or_read(_task(family="lognormal"), tmp_path).family == "lognormal"
    assert fit_or_read(_task(times=np.minimum(_task().times, 39.0)), tmp_path).loglik != first.loglik
    assert len(list(tmp_path.iterdir())) == 3


def test_a_damaged_store_is_made_again(tmp_path: Path) -> None:
    first = fit_or_read(_task(), tmp_path)
    next(tmp_path.iterdir()).write_text('{"family": "wei')
    assert fit_or_read(_task(), tmp_path) == first


def test_a_failed_fit_names_its_transition() -> None:
    with pytest.raises(FitError, match=r"fit stay \(Home to Hospital\)"):
        fit_or_read(_task(events=np.zeros(200, dtype=bool)), None)


def test_a_folder_that_cannot_be_written_does_not_lose_the_fit(tmp_path: Path) -> None:
    occupied = tmp_path / "fits"
    occupied.write_text("a file, not a folder")
    assert fit_or_read(_task(), occupied).converged


def test_an_interrupted_write_leaves_neither_a_fit_nor_scraps(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupted(source: object, target: object) -> None:
        raise OSError("disk full")

    monkeypatch.setattr(store.os, "replace", interrupted)
    assert fit_or_read(_task(), tmp_path).converged
    assert list(tmp_path.iterdir()) == []
