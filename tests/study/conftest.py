"""Helpers of the study tests: write a study, load it, or collect its faults."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from study_builder import write_study

from microsim.errors import Fault, InputError
from microsim.study.load import load_study
from microsim.study.parts import Study

Loader = Callable[..., Study]
Faulter = Callable[..., list[Fault]]


@pytest.fixture
def load(tmp_path: Path) -> Loader:
    """load(**as write_study) -> Study"""

    def build(**changes: Any) -> Study:
        return load_study(write_study(tmp_path / "study", **changes))

    return build


@pytest.fixture
def faults_of(tmp_path: Path) -> Faulter:
    """faults_of(**as write_study) -> the faults; fails if there are none."""

    def build(**changes: Any) -> list[Fault]:
        with pytest.raises(InputError) as caught:
            load_study(write_study(tmp_path / "study", **changes))
        return caught.value.faults

    return build
