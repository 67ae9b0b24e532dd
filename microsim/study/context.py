"""What every part of the loader shares: the fault list, the files read so far, and how a key is named and found.

Reads files of one folder and nothing else. Turns formula and unit errors into faults with file, key and line.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path, PurePosixPath

from microsim.errors import Fault, FaultList
from microsim.study.dimensions import PLAIN, AnyDim, Dim, describe, parse_unit
from microsim.study.expression import const
from microsim.study.formula import Formula, FormulaError, Scope, Symbol, nearest, parse
from microsim.study.locate import Lines

STUDY_FILE = "study.toml"
NOT_A_NUMBER = Formula("", const(float("nan")), None)


@dataclass(slots=True)
class Context:
    """One reading of one study. study_unit and money say what inputs are converted to; ``silenced`` keys already
    have a fault, so what follows from it is not reported again."""

    root: Path
    lines: Lines
    study_unit: str = "year"
    years_per_unit: float = 1.0
    money: str = "EUR"
    faults: FaultList = field(default_factory=FaultList)
    warnings: list[str] = field(default_factory=list)
    defaults: list[tuple[str, str]] = field(default_factory=list)
    contents: dict[str, str] = field(default_factory=dict)
    silenced: set[str] = field(default_factory=set)
    symbols: dict[str, Symbol] = field(default_factory=dict)
    states: tuple[str, ...] = ()

    def fault(self, key: str, problem: str, remedy: str, *, value: object = "") -> None:
        """A fault in study.toml, unless the key is already known to be faulty."""
        if not self.is_silenced(key):
            self.faults.add(STUDY_FILE, key, problem, remedy, value=value, where=self.lines.where(key))

    def default(self, key: str, value: object) -> None:
        self.defaults.append((key, str(value)))

    def read(self, name: str, key: str) -> str | None:
        """Text of a data file with plain line ends, or None after a fault. ``key`` is what names the file."""
        if name in self.contents:
            return self.contents[name]
        if PurePosixPath(name.replace("\\", "/")).is_absolute() or ":" in name or ".." in Path(name).parts:
            self.fault(key, "data must lie inside the study folder", "Give a path relative to study.toml.", value=name)
            return None
        path = self.root / name
        if not name or not path.is_file():
            found = [
                p.relative_to(self.root).as_posix() for p in (*self.root.glob("*.csv"), *self.root.glob("*/*.csv"))
            ]
            self.fault(key, "there is no such file in the study folder", nearest(name, found), value=name)
            return None
        try:
            text = decode(path.read_bytes())
        except OSError as e:
            self.fault(key, f"the file cannot be read: {e.strerror}", "Check its permissions.", value=name)
            return None
        if text is None:
            self.fault(key, "the file is not UTF-8 text", "Save it as CSV in UTF-8.", value=name)
            return None
        self.contents[name] = text
        return text

    def scope(self, *, memory: bool) -> Scope:
        """Names for formulas of states and clocks (memory) or for places where only inputs make sense."""
        symbols: Mapping[str, Symbol] = self.symbols
        barred: dict[str, str] = {}
        if not memory:
            symbols = {n: s for n, s in self.symbols.items() if s.op == "input"}
            barred = {n: "it differs between patients" for n, s in self.symbols.items() if s.op != "input"}
        return Scope(symbols, self.states, memory, self.years_per_unit, barred)

    def formula(
        self, text: str | float, key: str, *, dim: Dim | None = PLAIN, memory: bool = True, remedy: str = ""
    ) -> Formula:
        """Parse a formula of study.toml that must have dimension ``dim`` (None: any); a fault gives NOT_A_NUMBER."""
        try:
            formula = parse(text, self.scope(memory=memory))
        except FormulaError as e:
            at = f" (column {e.position})" if e.position else ""
            self.fault(key, e.problem + at, e.remedy, value=text)
            return NOT_A_NUMBER
        self.check_dimension(formula, key, dim=dim, remedy=remedy)
        return formula

    def check_dimension(self, formula: Formula, key: str, *, dim: AnyDim, remedy: str = "") -> None:
        if dim is not None and formula.dim is not None and formula.dim != dim:
            problem = f"the formula gives {describe(formula.dim)} where {describe(dim)} is wanted"
            self.fault(key, problem, remedy or "Check the units of the inputs used.", value=formula.text)

    def unit(self, text: str) -> tuple[float, Dim]:
        return parse_unit(text, study_unit=self.study_unit, money=self.money)

    def is_silenced(self, key: str) -> bool:
        return any(key == s or key.startswith(s + ".") for s in self.silenced)

    def adopt(self, faults: list[Fault]) -> None:
        """Take over faults found elsewhere, but for those that follow from a known one."""
        kept = (f for f in faults if not (f.file == STUDY_FILE and self.is_silenced(f.key)))
        self.faults.faults.extend(f for f in kept if f not in self.faults.faults)

    def silence(self, faults: list[Fault]) -> None:
        self.silenced.update(f.key for f in faults)


def decode(raw: bytes) -> str | None:
    """UTF-8 text with ``\\n`` line ends and no byte-order mark, or None."""
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return None
    return text.replace("\r\n", "\n").replace("\r", "\n")


def content_hash(contents: Mapping[str, str]) -> str:
    """sha256 (hex) over named texts, in order of name."""
    digest = hashlib.sha256()
    for name in sorted(contents):
        for part in (name, contents[name]):
            raw = part.encode()
            digest.update(len(raw).to_bytes(8, "little") + raw)
    return digest.hexdigest()
