"""``microsim check STUDY``: every fault of a study, or what it says in words and as a drawing of the pathway.

Runs nothing and writes nothing. Plain text in a pipe, colour on a terminal, JSON on request.
"""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Iterable

    from rich.console import Console

    from microsim.errors import InputError
    from microsim.study.parts import Study
    from microsim.study.pathway import PathwayGraph

    Subparsers = argparse._SubParsersAction[argparse.ArgumentParser]


def add_parser(subparsers: Subparsers) -> None:
    """Add the verb to the command line."""
    parser = subparsers.add_parser("check", help="list every fault of a study, or show what it says")
    parser.add_argument("study", help="folder of the study, or its study.toml")
    parser.add_argument("--json", action="store_true", help="print JSON instead of text")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Check a study; 0 if it has no fault, 2 otherwise."""
    from microsim.errors import InputError
    from microsim.study.load import load_study

    try:
        study = load_study(args.study)
    except InputError as e:
        _print_faults(e, as_json=args.json)
        return e.exit_code
    if args.json:
        _print_json(summary(study))
    else:
        _print_summary(study)
    return 0


def _print_json(content: dict[str, Any]) -> None:
    import json

    print(json.dumps(content, indent=2, ensure_ascii=False))


def _console() -> Console:
    import sys

    from rich.console import Console

    # A pipe has no width of its own; a generous one keeps each line of a table on one line.
    width = None if sys.stdout.isatty() else 160
    return Console(width=width, highlight=False, emoji=False, markup=False, soft_wrap=not sys.stdout.isatty())


def _print_faults(error: InputError, *, as_json: bool) -> None:
    from dataclasses import asdict

    if as_json:
        _print_json({"ok": False, "faults": [asdict(f) for f in error.faults]})
        return
    console = _console()
    n = len(error.faults)
    console.print(f"{n} fault{'' if n == 1 else 's'}", style="bold red")
    for f in error.faults:
        place = f.file + (f", {f.where}" if f.where else "")
        console.print()
        console.print(f"{place}: {f.key}", style="bold")
        console.print(f"  {f.problem}" + (f" (found {f.value})" if f.value else ""))
        console.print(f"  -> {f.remedy}")


def difference_lines(study: Study) -> dict[str, list[str]]:
    """Each strategy's differences from the base, one line each, as "what: how"."""
    from microsim.study.pathway import hazard_words

    words = {"set": "", "times": "times ", "plus": "plus "}
    out = {}
    for s in study.strategies:
        lines = [f"inputs.{n}: {f.text}" for n, f in s.inputs.items()]
        lines += [f"{'.'.join(d.path)}: {words[d.how]}{d.formula.text}" for d in s.differences]
        lines += [f"clocks.{n}.hazard: {hazard_words(h)}" for n, h in s.hazards.items()]
        lines += [f"once.cost.{n}: {f.text}" for n, f in s.once.items()]
        out[s.name] = lines
    return out


def summary(study: Study) -> dict[str, Any]:
    """What the study says, as plain data."""
    from dataclasses import asdict

    from microsim.study.pathway import pathway

    graph = pathway(study)
    differences = difference_lines(study)
    return {
        "ok": True,
        "title": study.title,
        "invented": study.text.invented,
        "folder": study.folder,
        "content_hash": study.content_hash,
        "time": study.time_unit,
        "horizon": study.horizon,
        "currency": study.text.currency,
        "states": [asdict(n) for n in graph.nodes],
        "clocks": [asdict(e) for e in graph.edges],
        "strategies": [
            {"name": s.name, "label": s.label, "comparator": s.name == study.decision.comparator,
             "differences": differences[s.name]}
            for s in study.strategies
        ],
        "fits": [{"name": f.name, "family": f.family, "source": f.source, "target": f.target} for f in study.fits],
        "inputs": len(study.inputs),
        "files": list(study.files),
        "defaults": [{"key": k, "value": v} for k, v in study.defaults],
        "warnings": list(study.warnings),
    }  # fmt: skip


def drawing(graph: PathwayGraph, *, ascii_only: bool = False) -> list[str]:
    """The pathway as text: each state with its exits below it."""
    last, middle, arrow = ("`--", "|--", "-->") if ascii_only else ("└──", "├──", "──>")
    lines = []
    for node in graph.nodes:
        marks = [m for m, on in (("start", node.start), ("absorbing", node.absorbing), ("dead", node.dead)) if on]
        label = f'  "{node.label}"' if node.label != node.name else ""
        lines.append(f"[{node.name}]{label}" + (f"  ({', '.join(marks)})" if marks else ""))
        exits = [e for e in graph.edges if e.source == node.name]
        for e in exits:
            corner = last if e is exits[-1] else middle
            background = ", background" if e.background else ""
            lines.append(f"  {corner} {e.clock} ({e.scale}{background}) {arrow} [{e.target}]")
    return lines


def _print_summary(study: Study) -> None:
    from microsim.study.pathway import pathway

    console = _console()
    graph = pathway(study)
    console.print(study.title, style="bold")
    if study.text.invented:
        console.print("Invented: not about real patients.", style="bold yellow")
    console.print(f"No faults. {len(study.inputs)} inputs, {len(study.fits)} fits, files: {', '.join(study.files)}.")
    console.print(
        f"Horizon {study.horizon:g} {study.time_unit}s, {study.text.currency}, content {study.content_hash[:12]}"
    )
    _heading(console, "Pathway")
    for line in drawing(graph, ascii_only=not console.encoding.lower().startswith("utf")):
        console.print(line)
    _heading(console, "Clocks")
    rows = [(e.clock, f"{e.source} -> {e.target}", e.scale, e.hazard, e.ratio) for e in graph.edges]
    _table(console, ("clock", "from -> to", "time", "hazard", "ratio"), rows=rows)
    _heading(console, "Strategies")
    for s in study.strategies:
        comparator = " (comparator)" if s.name == study.decision.comparator else ""
        console.print(f"{s.name}: {s.label}{comparator}")
        for line in difference_lines(study)[s.name] or ["as the base"]:
            console.print(f"  {line}")
    if study.defaults:
        _heading(console, "Not said, so taken")
        for key, value in study.defaults:
            console.print(f"  {key} = {value}")
    if study.warnings:
        _heading(console, "Warnings")
        for warning in study.warnings:
            console.print(f"  {warning}", style="yellow")


def _heading(console: Console, text: str) -> None:
    console.print()
    console.print(text, style="bold")


def _table(console: Console, header: tuple[str, ...], *, rows: Iterable[tuple[str, ...]]) -> None:
    from rich import box
    from rich.table import Table

    table = Table(box=box.ASCII2 if not console.is_terminal else box.SIMPLE, show_edge=False)
    for name in header:
        table.add_column(name, overflow="fold")
    for row in rows:
        table.add_row(*row)
    console.print(table)
