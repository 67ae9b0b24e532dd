"""What leaves an engine: plain arrays with named axes, and nothing that knows how they were made.

Axes: g block group for the jackknife, s state, a arc, m outcome, r reward (0 = utility, 1.. = cost categories),
x strategy, T cells of elapsed time, D cells of sojourn time. An arc is one clock out of one of its source states.
Sums are over patients of the group; times are in study time units; money and QALYs in rewards are undiscounted.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

F = npt.NDArray[np.float64]
I = npt.NDArray[np.int64]  # noqa: E741


@dataclass(frozen=True, slots=True)
class Layout:
    """Names behind every index. arcs: (clock, source, target) as indices into clocks and states.

    outcomes, in order: "ly", "ly_disc", "qaly", "qaly_disc", "cost", "cost_disc", then "cost:<category>" and
    "cost_disc:<category>" for each category, "time:<state>" for each state (study time units, undiscounted, within the
    horizon), "entries:<state>" for each state and "events:<clock>" for each clock (counts). ly and qaly in years.
    """

    strategies: tuple[str, ...]
    states: tuple[str, ...]
    clocks: tuple[str, ...]
    arcs: tuple[tuple[int, int, int], ...]
    categories: tuple[str, ...]
    outcomes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Grid:
    """time: float64[T+1], elapsed-time edges from 0 to the horizon, in study time units, cells are whole numbers of
    cohort cycles (the last may be shorter). sojourn: float64[D+1], from 0 to the horizon."""

    time: F
    sojourn: F


@dataclass(frozen=True, slots=True)
class PathTally:
    """Occurrence and exposure of one strategy's simulated paths.

    present float64[g, s, T+1] people in the state at each edge; exposure float64[g, s, T] person-time;
    entries float64[g, s, T] arrivals by transition; events float64[g, a, T] firings;
    exposure_sojourn float64[g, s, D]; events_sojourn float64[g, a, D]. The start is not an entry.
    """

    present: F
    exposure: F
    entries: F
    events: F
    exposure_sojourn: F
    events_sojourn: F


@dataclass(frozen=True, slots=True)
class HazardTally:
    """Hazards and rewards of the *evaluated* arm, integrated along the *path* arm's patients.

    integrated float64[g, a, T]: int Y lambda dt. reward float64[g, r, s, T]: int Y (reward per study time unit) dt
    (utility already multiplied by years per unit, so it sums to QALYs). lump float64[g, r, s, T]: sum of one-off
    amounts at entries to s. integrated_sojourn float64[g, a, D].
    """

    integrated: F
    integrated_sojourn: F
    reward: F
    lump: F


@dataclass(frozen=True, slots=True)
class Moments:
    """Streamed moments of per-patient outcomes.

    patients int; mean float64[x, m]; covariance float64[m, x, x] between strategies of the same outcome (per patient,
    divisor n-1); money float64[2x, 2x] covariance of (cost_disc, qaly_disc) of all strategies, ordered
    cost_0, qaly_0, cost_1, qaly_1, ...; group_patients int64[g]; group_mean float64[g, x, m].
    """

    patients: int
    mean: F
    covariance: F
    money: F
    group_patients: I
    group_mean: F


@dataclass(frozen=True, slots=True)
class SimulationRecord:
    """Everything an individual-level run hands over. hazards[(i, j)]: paths of strategy i, hazards and rewards of
    strategy j; always holds (i, i), and (comparator, j) for every j. ``start`` float64[s]: share of patients starting
    in each state, per strategy identical."""

    layout: Layout
    grid: Grid
    moments: Moments
    paths: tuple[PathTally, ...]
    hazards: Mapping[tuple[int, int], HazardTally]
    start: F
