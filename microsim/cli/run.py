"""``microsim run``: the main job for one study folder, ending in a verdict and a report."""

from __future__ import annotations

import argparse
import sys
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from contextlib import ExitStack
    from pathlib import Path

    from rich.console import Console

    from microsim.pipeline import Result
    from microsim.study.parts import Study

RESULTS = "results"


def add_parser(subparsers: Any) -> None:
    parser = subparsers.add_parser(
        "run",
        help="fit, simulate, compare with the cohort, and report",
        description="Run the main job on a study folder: fits, individual-level simulation, equivalent cohorts, verdict, "
        "report. Numbers do not depend on --threads.",
    )
    parser.add_argument("study", metavar="STUDY", help="study folder, or its study.toml")
    parser.add_argument("--out", metavar="DIR", help=f"result folder; must be new (default: {RESULTS}/<study>-<time>)")
    parser.add_argument("--patients", type=int, metavar="N", help="patients per strategy (default: the study's)")
    parser.add_argument("--seed", type=int, metavar="S", help="seed of the random numbers (default: the study's)")
    parser.add_argument("--threads", type=int, metavar="K", help="threads (default: all cores)")
    parser.add_argument(
        "--json", action="store_true", help="print the whole summary as one JSON object to standard output"
    )
    parser.add_argument(
        "--keep-histories", action="store_true", help="also write every sojourn of every patient (Parquet)"
    )
    parser.add_argument("--keep-patients", action="store_true", help="also write every patient's outcomes (Parquet)")


def _target(arguments: argparse.Namespace, study: Study) -> Path:
    from datetime import datetime
    from pathlib import Path

    if arguments.out:
        return Path(arguments.out)
    stamp = datetime.now().strftime("%Y%m%d-%H%M%S")
    return Path(RESULTS) / f"{study.folder}-{stamp}"


def _open_sinks(arguments: argparse.Namespace, folder: Path, stack: ExitStack) -> dict[str, Any]:
    """Chunk-by-chunk writers for what the user wants kept; opened at the first chunk, when the layout is known."""
    from microsim.records.event_log import OutcomeTable, SojournLog

    writers: dict[str, Any] = {}

    def histories(first: int, chunk: Any) -> None:
        if "log" not in writers:
            writers["log"] = stack.enter_context(SojournLog(folder / "histories.parquet", chunk.layout))
        writers["log"].add(first, chunk.log)

    def patients(first: int, chunk: Any) -> None:
        if "outcomes" not in writers:
            writers["outcomes"] = stack.enter_context(OutcomeTable(folder / "patients.parquet", chunk.layout))
        writers["outcomes"].add(first, chunk.outcomes)

    return {
        "log": histories if arguments.keep_histories else None,
        "outcomes": patients if arguments.keep_patients else None,
    }


def _announce(console: Console) -> None:
    from microsim import _jit

    if not _jit.is_warm():
        console.print("Compiling the simulation engine: once on this machine, up to half a minute.", highlight=False)


def _write(result: Result, folder: Path) -> None:
    from microsim.records.folder import write_json, write_tables
    from microsim.report.figures import all_figures, save_figures
    from microsim.report.html import write_report

    write_tables(folder, result.tables)
    write_json(folder / "summary.json", result.summary)
    write_json(folder / "manifest.json", result.manifest)
    drawings = all_figures(result)
    save_figures(drawings, folder / "figures")
    write_report(result, folder / "report.html", drawings=drawings)


def run(arguments: argparse.Namespace) -> int:
    """Exit code 0; faults and interruptions surface as exceptions."""
    import json
    from contextlib import ExitStack

    from rich.console import Console

    from microsim.cache import cache_root
    from microsim.cli.progress import Progress
    from microsim.pipeline import check_settings
    from microsim.pipeline import run as run_study
    from microsim.records.folder import new_folder, refuse_existing
    from microsim.report.terminal import print_verdict
    from microsim.study.load import load_study

    study = load_study(arguments.study)
    target = _target(arguments, study)
    refuse_existing(target)
    check_settings(study, arguments.patients, arguments.seed, arguments.threads)
    notes = Console(stderr=True)
    _announce(notes)
    with new_folder(target) as folder:
        with ExitStack() as stack, Progress(notes) as progress:
            sinks = _open_sinks(arguments, folder, stack)
            result = run_study(
                study,
                patients=arguments.patients,
                seed=arguments.seed,
                threads=arguments.threads,
                fits_folder=cache_root() / "fits",
                stage=progress.update,
                **sinks,
            )
        with Progress(notes) as progress:
            progress.update("report", 0, 1)
            _write(result, folder)
    report = target / "report.html"
    if arguments.json:
        json.dump({**result.summary, "folder": str(target), "report": str(report)}, sys.stdout, allow_nan=False)
        sys.stdout.write("\n")
    else:
        print_verdict(result, Console(), report=report)
    return 0
