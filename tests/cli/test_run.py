"""The command from end to end: exit codes, what is written, what is not, and JSON that can be read."""

from __future__ import annotations

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pandas as pd
import pytest

import microsim
from microsim.cli.main import main

ROOT = Path(__file__).resolve().parents[2]
STEADY = ROOT / "scenarios" / "steady"
TABLES = {
    "choice", "fits", "gap", "increments", "incremental", "net_benefit", "occupancy", "outcomes", "rates", "verdict",
}  # fmt: skip


@pytest.fixture
def elsewhere(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_a_run_ends_in_a_verdict_and_a_whole_folder(elsewhere: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert (
        main(["run", str(STEADY), "--patients", "2000", "--out", "found", "--keep-histories", "--keep-patients"]) == 0
    )
    out = capsys.readouterr().out
    assert "Report: found/report.html" in out and "adequate" in out.lower() and "nvented" in out
    folder = elsewhere / "found"
    assert (
        {f.stem for f in (folder / "tables").glob("*.csv")}
        == {f.stem for f in (folder / "tables").glob("*.parquet")}
        == TABLES
    )
    manifest = json.loads((folder / "manifest.json").read_text())
    assert manifest["settings"] == {
        "patients": 2000,
        "seed": 20261202,
        "cycle": pytest.approx(1 / 52.18, rel=0.01),
        "correction": "half-cycle",
    }
    assert len(manifest["study_hash"]) == 64 and set(manifest["seconds"]) == {"fit", "bind", "simulate", "compare"}
    assert str(ROOT) not in (folder / "manifest.json").read_text() + (folder / "report.html").read_text()
    assert len(pd.read_parquet(folder / "patients.parquet")) == 4000
    assert pd.read_parquet(folder / "histories.parquet").patient.nunique() == 2000
    assert [p.name for p in elsewhere.iterdir()] == ["found"]


def test_json_is_one_object_with_the_documented_keys(elsewhere: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["run", str(STEADY), "--patients", "400", "--json", "--out", "a"]) == 0
    summary = json.loads(capsys.readouterr().out)
    assert set(summary) == {
        "title", "invented", "headline", "sentences", "cautions", "currency", "time_unit", "settings", "labels",
        "defaults", "warnings", "verdict", "choice", "net_benefit", "incremental", "outcomes", "increments", "gap",
        "fits", "folder", "report",
    }  # fmt: skip
    assert summary["invented"] is True and summary["folder"] == "a"
    stored = json.loads((elsewhere / "a" / "summary.json").read_text())
    assert stored["outcomes"] == summary["outcomes"]


def test_the_same_seed_gives_the_same_numbers_for_any_threads(elsewhere: Path) -> None:
    for name, threads in (("one", "1"), ("three", "3")):
        assert main(["run", str(STEADY), "--patients", "800", "--threads", threads, "--out", name]) == 0
    one, three = (json.loads((elsewhere / n / "summary.json").read_text()) for n in ("one", "three"))
    assert one == three


def test_python_gives_what_the_command_gives(elsewhere: Path) -> None:
    assert main(["run", str(STEADY), "--patients", "400", "--seed", "5", "--out", "a"]) == 0
    result = microsim.run(microsim.load_study(STEADY), patients=400, seed=5)
    table = pd.read_parquet(elsewhere / "a" / "tables" / "outcomes.parquet")
    pd.testing.assert_frame_equal(result.tables["outcomes"], table, check_dtype=False)


@pytest.mark.parametrize(
    "arguments",
    [
        ["run", "nowhere"],
        ["run", str(STEADY), "--patients", "5"],
        ["run", str(STEADY), "--threads", "0"],
        ["run", str(STEADY), "--seed", "-1"],
        ["run", str(ROOT / "README.md")],
    ],
)
def test_bad_input_exits_with_2_and_writes_nothing(
    arguments: list[str], elsewhere: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(arguments) == 2
    assert "nothing was written" in capsys.readouterr().err
    assert not list(elsewhere.iterdir())


def test_nothing_is_overwritten(elsewhere: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (elsewhere / "mine").mkdir()
    (elsewhere / "mine" / "notes.txt").write_text("keep")
    assert main(["run", str(STEADY), "--patients", "400", "--out", "mine"]) == 2
    assert [f.name for f in (elsewhere / "mine").iterdir()] == ["notes.txt"]


def test_a_fault_in_a_copy_is_found_before_any_work(elsewhere: Path, capsys: pytest.CaptureFixture[str]) -> None:
    copy = elsewhere / "copy"
    shutil.copytree(STEADY, copy)
    text = (copy / "study.toml").read_text()
    (copy / "study.toml").write_text(re.sub(r'(?m)^(to\s*= )"Flare"', r'\1"Flair"', text, count=1))
    assert main(["run", "copy"]) == 2
    err = capsys.readouterr().err
    assert "Did you mean 'Flare'?" in err and "line" in err
    assert not (elsewhere / "results").exists()


def test_a_number_that_goes_wrong_in_a_run_exits_with_1_and_leaves_nothing(
    elsewhere: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    copy = elsewhere / "copy"
    shutil.copytree(STEADY, copy)
    text = (copy / "study.toml").read_text()
    (copy / "study.toml").write_text(
        text.replace(
            "[clocks.",
            '[clocks.odd]\nfrom = "Clear"\nto = "Flare"\nhazard = { rate = 0.5 }\nratio = "log(events() - 1)"\n\n[clocks.',
            1,
        )
    )
    assert main(["run", "copy", "--patients", "400"]) == 1
    err = capsys.readouterr().err
    assert "clock odd" in err and "patient" in err and "Traceback" not in err
    assert [p.name for p in elsewhere.iterdir()] == ["copy"]


def test_an_interrupt_exits_with_130_and_leaves_nothing(elsewhere: Path) -> None:
    command = [
        sys.executable,
        "-m",
        "microsim.cli.main",
        "run",
        str(STEADY),
        "--patients",
        "20000000",
        "--threads",
        "1",
    ]
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    process = subprocess.Popen(command, cwd=elsewhere, env=environment, stderr=subprocess.PIPE, text=True)
    deadline = time.monotonic() + 120
    while not (elsewhere / "results").exists() and time.monotonic() < deadline:
        time.sleep(0.1)
    time.sleep(1.0)
    process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=60)
    assert process.returncode == 130
    assert "Interrupted" in err and "Traceback" not in err
    assert not list(elsewhere.iterdir())
