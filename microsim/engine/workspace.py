"""Arrays a thread reuses from chunk to chunk: what patients carry, block scratch, and the log of sojourns."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from microsim.engine import columns, tally
from microsim.program import FIXED_FIELDS, Program
from microsim.records.simulation import Layout


class Workspace:
    """Scratch for chunks of up to ``chunk`` patients of any of the given programs; ``log_rows`` 0 keeps no log."""

    def __init__(self, programs: tuple[Program, ...], layout: Layout, *, chunk: int, edges: int, log_rows: int) -> None:
        states, clocks = len(layout.states), len(layout.clocks)
        self.fields = programs[0].arrays.fields.shape[0]
        self.memory = np.zeros((FIXED_FIELDS + self.fields, chunk))
        self.remaining = np.zeros((clocks, chunk))
        self.accumulators = np.zeros((max(p.accumulators for p in programs), chunk))
        self.rows = np.zeros((max(p.rows for p in programs), columns.BLOCK))
        self.x = np.zeros((columns.N_SCRATCH, columns.BLOCK))
        self.ints = np.zeros((5, columns.BLOCK), dtype=np.int64)
        self.words = np.zeros((2, columns.BLOCK), dtype=np.uint64)
        self.waiting = np.zeros((states, chunk), dtype=np.int64)
        self.counts = np.zeros(states, dtype=np.int64)
        self.present = np.zeros((states if log_rows == 0 else 0, edges + 1))
        self.status = np.zeros(8, dtype=np.int64)
        most_arcs = max(int(np.max(np.diff(p.arrays.states[:, 1:3], axis=1))) for p in programs)
        self._tally = (
            self.rows,
            np.zeros((5 + most_arcs, columns.BLOCK)),
            self.ints,
            *(
                np.zeros(tally.SEGMENTS, dtype=kind)
                for kind in (np.int64, np.int64, np.float64, np.int64, np.float64, np.float64)
            ),
        )
        self._outcomes: dict[tuple[int, int, int], npt.NDArray[np.float64]] = {}
        self.resize_log(log_rows)

    def outcome_rows(self, shape: tuple[int, int, int]) -> npt.NDArray[np.float64]:
        """A float64 array [arm, outcome, patient] to fill, the same one for the same shape: fresh pages cost time."""
        if shape not in self._outcomes:
            self._outcomes[shape] = np.empty(shape)
        return self._outcomes[shape]

    def resize_log(self, rows: int) -> None:
        self.log_index = np.zeros((3, 3 * rows), dtype=np.int64)
        self.log_value = np.zeros((FIXED_FIELDS + self.fields, rows))

    def tally_scratch(self) -> tuple[npt.NDArray[Any], ...]:
        """rows, x, ints, lane, cell, end, levels, c, h as ``tally.tally_hazards`` takes them."""
        return self._tally
