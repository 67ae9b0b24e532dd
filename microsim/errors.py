"""The one exception hierarchy, and the collector that lets an input report all its faults at once.

Knows nothing of studies or engines. Every message names a file, a key (row or line where there is one), the value
found and the remedy.
"""

from __future__ import annotations

from dataclasses import dataclass, field


class MicrosimError(Exception):
    """Base of everything this package raises on purpose; ``exit_code`` is what the command line returns."""

    exit_code = 1


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong with the input.

    file: path relative to the study folder; key: dotted key or column; where: "line 12" / "row 7" or "";
    value: what was found, as text; problem: one sentence; remedy: one sentence.
    """

    file: str
    key: str
    problem: str
    remedy: str
    value: str = ""
    where: str = ""

    def __str__(self) -> str:
        place = self.file + (f", {self.where}" if self.where else "")
        found = f" (found {self.value})" if self.value else ""
        return f"{place}: {self.key}: {self.problem}{found}. {self.remedy}"


class InputError(MicrosimError):
    """Bad input: every fault found, none acted upon."""

    exit_code = 2

    def __init__(self, faults: list[Fault]) -> None:
        self.faults = list(faults)
        super().__init__("\n".join(str(f) for f in self.faults))


class FitError(MicrosimError):
    """A distribution could not be fitted, or a fit that did not converge was asked for."""


class SimulationError(MicrosimError):
    """The engine met a value it must not go on with; names patient, state, clock, memory values and formula."""


class CohortError(MicrosimError):
    """A cohort calculation was asked for something not estimable or not valid."""


@dataclass(slots=True)
class FaultList:
    """Collects faults while a study is read; ``raise_if_any`` reports them together."""

    faults: list[Fault] = field(default_factory=list)

    def add(self, file: str, key: str, problem: str, remedy: str, *, value: object = "", where: str = "") -> None:
        fault = Fault(file, key, problem, remedy, "" if value == "" else str(value), where)
        if fault not in self.faults:
            self.faults.append(fault)

    def raise_if_any(self) -> None:
        if self.faults:
            raise InputError(self.faults)
