"""Fits become arrays in their own time unit, with left truncation, censoring and covariates."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from microsim.study.fit_task import FitTask, fit_tasks
from microsim.study.parts import Study

Loader = Callable[..., Study]

ROWS = """\
patient,from,to,entry,exit,observed_from,prior,arm
1,Home,Hospital,0,10,,0,nurse
1,Hospital,Home,10,12,,0,nurse
1,Home,censored,12,50,30,1,nurse
2,Home,Dead,5,8,,4,usual
3,Home,,0,20,20,9,usual
4,Home,Hospital,1,7,,9,usual
"""


def task(load: Loader, **changes: Any) -> FitTask:
    (only,) = fit_tasks(load(files={"episodes.csv": ROWS}, **changes))
    return only


def test_sojourn_times_count_from_entry_to_the_state(load: Loader) -> None:
    got = task(load)
    assert got.times.tolist() == [10, 38, 3, 6]
    assert got.events.tolist() == [True, False, False, True]
    assert got.entry.tolist() == [0, 18, 0, 0]
    assert got.covariates.tolist() == [[0, 1], [1, 1], [4, 0], [6, 0]]
    assert got.coefficient_names == ("b_prior", "b_nurse")
    assert got.to_study_unit == pytest.approx(1 / 365.25)
    assert got.n_dropped_note == "1 of 5 rows have no time at risk and are left out"


def test_elapsed_times_are_start_and_stop(load: Loader) -> None:
    got = task(load, study={"fits.home_stay.time": "elapsed", "clocks.readmission.time": "elapsed"})
    assert got.times.tolist() == [10, 50, 8, 7]
    assert got.entry.tolist() == [0, 30, 5, 1]


def test_the_unit_is_the_studys_where_none_is_given(load: Loader) -> None:
    got = task(load, study={"fits.home_stay.unit": None})
    assert (got.unit, got.to_study_unit) == ("year", 1.0)


def test_arrays_cannot_be_written_to(load: Loader) -> None:
    got = task(load)
    for array in (got.times, got.events, got.entry, got.covariates):
        assert not array.flags.writeable
    assert got.covariates.dtype == np.float64


def test_without_covariates_the_matrix_has_no_columns(load: Loader) -> None:
    got = task(load, study={"fits.home_stay.covariates": None, "clocks.readmission.ratio": 1})
    assert got.covariates.shape == (4, 0)


def test_the_hash_tells_data_and_settings_apart(load: Loader) -> None:
    hashes = {
        task(load).content_hash,
        task(load, study={"fits.home_stay.family": "lognormal"}).content_hash,
        task(load, study={"fits.home_stay.unit": "month"}).content_hash,
        task(load, study={"fits.home_stay.covariates.b_prior": "min(prior, 5)"}).content_hash,
    }
    assert len(hashes) == 4
    assert task(load, title="another title").content_hash in hashes
