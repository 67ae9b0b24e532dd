"""The rooms of the house: who may import whom, what starts light, and what lies at the top level."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "microsim"

# Room -> the rooms and modules of ours it may import besides itself and errors. Data flows one way.
STUDY_DATA = {"study.bound", "study.expression"}
ALLOWED: dict[str, set[str]] = {
    "errors": set(),
    "cache": set(),
    "_jit": {"cache"},
    "rng": set(),
    "hazards": {"_jit"},
    "fitting": {"hazards"},
    "study": {"hazards.core"},
    "records": set(),
    "program": {"hazards.core", "records", "rng", *STUDY_DATA},
    "engine": {"_jit", "hazards", "program", "records", "rng", *STUDY_DATA},
    "reference": {"hazards.core", "hazards.families", "records", "rng", *STUDY_DATA},
    "cohort": {"records", *STUDY_DATA},
    "economics": {"records", *STUDY_DATA},
    "comparison": {"cohort", "economics", "records", *STUDY_DATA},
    "report": set(),
    "pipeline": {"comparison", "engine", "fitting", "records", "study"},
    "cli": {"cache", "_jit", "pipeline", "records", "report", "study"},
}


def _imports(file: Path) -> set[str]:
    """Modules of ours a file imports, wherever in it, without the package name."""
    found: set[str] = set()
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {a.name for a in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found |= {node.module, *(f"{node.module}.{a.name}" for a in node.names)}
    ours = {m.removeprefix("microsim.") for m in found if m.startswith("microsim.")}
    # "from microsim.engine import queue" names both the room and the module: keep what exists
    return {
        m
        for m in ours
        if (PACKAGE / (m.replace(".", "/") + ".py")).exists() or (PACKAGE / m.replace(".", "/")).is_dir()
    }


def _permitted(module: str, room: str) -> bool:
    allowed = ALLOWED[room] | {room, "errors"}
    return any(module == a or module.startswith(a + ".") for a in allowed) or any(
        a.startswith(module + ".") for a in allowed
    )


def _sources() -> list[Path]:
    return [f for f in sorted(PACKAGE.rglob("*.py")) if f.parent != PACKAGE or f.stem != "__init__"]


def test_every_room_imports_only_what_it_may() -> None:
    wrong = []
    for file in _sources():
        room = file.relative_to(PACKAGE).parts[0].removesuffix(".py")
        wrong += [f"{file.relative_to(ROOT)} imports {m}" for m in _imports(file) if not _permitted(m, room)]
    assert not wrong


def test_the_rule_would_catch_a_report_that_imports_an_engine() -> None:
    assert not _permitted("engine.run", "report")
    assert not _permitted("cohort.memoryless", "engine")


def test_only_one_module_touches_numba() -> None:
    touching = [
        f.name
        for f in _sources()
        if "import numba" in f.read_text(encoding="utf-8") or "from numba" in f.read_text(encoding="utf-8")
    ]
    assert touching == ["_jit.py"]


@pytest.mark.parametrize("arguments", [["--help"], ["run", "--help"], ["--version"]])
def test_help_loads_nothing_heavy(arguments: list[str]) -> None:
    code = (
        "import sys\nfrom microsim.cli.main import main\n"
        f"try:\n    main({arguments!r})\nexcept SystemExit:\n    pass\n"
        "print(sorted({'numba', 'numpy', 'pandas', 'scipy', 'matplotlib', 'pydantic', 'rich'} & set(sys.modules)))"
    )
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    assert out.stdout.strip().endswith("[]")


def test_no_file_has_grown_beyond_what_a_reader_can_hold() -> None:
    long = {
        str(f.relative_to(ROOT)): n for f in _sources() if (n := len(f.read_text(encoding="utf-8").splitlines())) > 500
    }
    assert not long


def test_the_top_level_holds_only_what_belongs_there() -> None:
    listed = subprocess.run(["git", "ls-files"], capture_output=True, text=True, cwd=ROOT, check=False)
    names = {line.split("/")[0] for line in listed.stdout.splitlines()}
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "microsim", "tests", "scenarios", "results"}
    assert {n for n in names if not n.startswith(".")} <= allowed
