"""Histories and patient outcomes on disk equal what the engine logged."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from engine.pathways import remembering

from microsim.engine.run import Wants, simulate
from microsim.program import make_layout
from microsim.records.event_log import OutcomeTable, SojournLog


def test_parquet_files_hold_every_sojourn_and_every_outcome(tmp_path: Path) -> None:
    s = remembering()
    layout = make_layout(s)
    chunks = []
    with SojournLog(tmp_path / "log.parquet", layout) as log, OutcomeTable(tmp_path / "out.parquet", layout) as table:

        def keep(first, chunk):
            chunks.append((first, chunk))
            log.add(first, chunk.log)
            table.add(first, chunk.outcomes)

        r = simulate(s, patients=500, seed=1, wants=Wants(tallies=False, log=keep, outcomes=lambda first, chunk: None))
    frame = pd.read_parquet(tmp_path / "log.parquet")
    assert len(frame) == sum(index.shape[1] for _, c in chunks for index, _ in c.log)
    one = frame[(frame.strategy == "A") & (frame.patient == 499)].reset_index(drop=True)
    assert one.entry.iloc[0] == 0.0 and np.all(one.entry.to_numpy()[1:] == one.exit.to_numpy()[:-1])
    assert one.state.iloc[0] == "Home" and (one.clock.isna().sum() <= 1)
    events = frame[frame.strategy == "B"].clock.value_counts()
    i = layout.outcomes.index("events:in")
    assert events["in"] == round(r.moments.mean[1, i] * 500)
    outcomes = pd.read_parquet(tmp_path / "out.parquet")
    assert len(outcomes) == 1000
    np.testing.assert_allclose(outcomes.groupby("strategy", observed=True).ly.mean(), r.moments.mean[:, 0], rtol=1e-12)
