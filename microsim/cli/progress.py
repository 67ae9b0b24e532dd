"""A progress line on standard error: stage, bar, rate and time left. Shows nothing when it is not a terminal."""

from __future__ import annotations

from types import TracebackType

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, TaskID, TextColumn, TimeRemainingColumn
from rich.progress import Progress as Bars

STAGES = {
    "fit": "Fitting sojourn times",
    "simulate": "Simulating patients",
    "compare": "Computing cohorts and the gap",
    "report": "Writing the report",
}


class Progress:
    """``update(stage, done, total)`` from one thread; a context manager."""

    def __init__(self, console: Console) -> None:
        columns = (
            TextColumn("{task.description}"),
            BarColumn(),
            MofNCompleteColumn(),
            TextColumn("{task.fields[rate]}"),
        )
        self.bars = Bars(
            *columns, TimeRemainingColumn(), console=console, transient=True, disable=not console.is_terminal
        )
        self.tasks: dict[str, TaskID] = {}

    def __enter__(self) -> Progress:
        self.bars.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.bars.stop()

    def update(self, stage: str, done: int, total: int) -> None:
        if stage not in self.tasks:
            for earlier in self.tasks.values():
                self.bars.update(earlier, visible=False)
            self.tasks[stage] = self.bars.add_task(STAGES[stage], total=max(total, 1), rate="")
        task = self.bars.tasks[self.tasks[stage]]
        rate = f"{done / task.elapsed:,.0f}/s" if stage == "simulate" and task.elapsed and done else ""
        self.bars.update(self.tasks[stage], completed=done, total=max(total, 1), rate=rate)
