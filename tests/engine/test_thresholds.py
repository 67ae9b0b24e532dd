"""Thresholds: read once per firing, kept through interruptions, shared by strategies."""

from __future__ import annotations

import numpy as np
import pytest
from bound_builder import hazard
from engine.pathways import two_ways

from microsim import rng
from microsim.engine.run import Wants, simulate

PATIENTS, SEED = 80, 11


def test_a_clock_interrupted_by_a_loop_fires_when_its_own_consumption_reaches_the_first_threshold() -> None:
    s = two_ways(hazard("exponential", rate=0.1), "sojourn")
    logs = []
    simulate(s, patients=PATIENTS, seed=SEED, wants=Wants(tallies=False, log=lambda first, c: logs.append((first, c))))
    names = logs[0][1].layout.clocks
    clock_of = np.array([k for k, _, _ in logs[0][1].layout.arcs])
    first_thresholds = rng.thresholds(np.arange(PATIENTS), seed=SEED, clock="y")
    checked = 0
    for first, chunk in logs:
        (patient, _, arc), (entry, leave) = chunk.log[0]
        for i in np.unique(patient):
            mine = patient == i
            if arc[mine][-1] >= 0 and names[clock_of[arc[mine][-1]]] == "y":
                # clock y runs at 0.02 in both living states, through every visit to either
                assert 0.02 * (leave - entry)[mine].sum() == pytest.approx(first_thresholds[first + i], rel=1e-9)
                checked += 1
    assert checked >= 5
