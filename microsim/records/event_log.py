"""Sojourns and per-patient outcomes to Parquet, chunk by chunk, so that memory does not grow with patients."""

from __future__ import annotations

from pathlib import Path
from types import TracebackType

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.parquet as pq

from microsim.records.simulation import Layout

F = npt.NDArray[np.float64]
I = npt.NDArray[np.int64]  # noqa: E741


class _ParquetFile:
    """A Parquet file written in batches; closed by leaving the ``with`` block."""

    def __init__(self, path: Path, schema: pa.Schema) -> None:
        delta = [f.name for f in schema if f.type == pa.int64()]
        self.schema = schema
        self.writer = pq.ParquetWriter(
            path,
            schema,
            compression="zstd",
            use_dictionary=[f.name for f in schema if pa.types.is_dictionary(f.type)],
            column_encoding=dict.fromkeys(delta, "DELTA_BINARY_PACKED"),
        )

    def __enter__(self) -> _ParquetFile:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.writer.close()

    def write(self, columns: list[pa.Array]) -> None:
        self.writer.write_table(pa.Table.from_arrays(columns, schema=self.schema))


def _names(codes: I, names: tuple[str, ...]) -> pa.Array:
    """Dictionary column; -1 is null."""
    mask = codes < 0
    indices = pa.array(np.where(mask, 0, codes).astype(np.int32), mask=mask)
    return pa.DictionaryArray.from_arrays(indices, pa.array(names, type=pa.string()))


_NAME = pa.dictionary(pa.int32(), pa.string())


class SojournLog(_ParquetFile):
    """One row per sojourn: strategy, patient, state, entry, exit (study time units), clock that fired (null: none)."""

    def __init__(self, path: Path, layout: Layout) -> None:
        self.layout = layout
        kinds = {"strategy": _NAME, "patient": pa.int64(), "state": _NAME, "entry": pa.float64(), "exit": pa.float64()}
        super().__init__(path, pa.schema([pa.field(k, v) for k, v in {**kinds, "clock": _NAME}.items()]))
        self.arc_clock = np.array([k for k, _, _ in layout.arcs], dtype=np.int64)

    def add(self, first_patient: int, logs: tuple[tuple[I, F], ...]) -> None:
        """logs: per strategy, (patient within chunk, state, arc) int64[3, n] and (entry, exit) float64[2, n]."""
        for strategy, (index, value) in enumerate(logs):
            n = index.shape[1]
            arcs = index[2]
            clocks = np.where(arcs < 0, -1, self.arc_clock[arcs])
            self.write(
                [
                    _names(np.full(n, strategy), self.layout.strategies),
                    pa.array(index[0] + first_patient),
                    _names(index[1], self.layout.states),
                    pa.array(value[0]),
                    pa.array(value[1]),
                    _names(clocks, self.layout.clocks),
                ]
            )


class OutcomeTable(_ParquetFile):
    """One row per strategy and patient, one column per outcome."""

    def __init__(self, path: Path, layout: Layout) -> None:
        self.layout = layout
        outcomes = [pa.field(o, pa.float64()) for o in layout.outcomes]
        super().__init__(path, pa.schema([pa.field("strategy", _NAME), pa.field("patient", pa.int64()), *outcomes]))

    def add(self, first_patient: int, outcomes: F) -> None:
        """outcomes: float64[strategy, outcome, patient]."""
        n = outcomes.shape[2]
        patients = pa.array(np.arange(first_patient, first_patient + n, dtype=np.int64))
        for strategy, values in enumerate(outcomes):
            names = _names(np.full(n, strategy), self.layout.strategies)
            self.write([names, patients, *(pa.array(row) for row in values)])
