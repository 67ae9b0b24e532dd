"""Simulated paths -> the memoryless rung's rates and rewards, by integrated hazard over exposure.

Clocks that are not background get one rate for the whole horizon; background clocks one per cell of elapsed time, since
nobody builds a cohort without life tables and ageing is not memory. Rewards are projected the same way. Index 0 of the
leading axis uses all patients, the others leave one jackknife group out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from microsim.errors import CohortError
from microsim.records.simulation import SimulationRecord

F = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Projection:
    """rates float64[b, a, T] per study time unit; rewards float64[b, r, s] per study time unit in the state; lumps
    float64[b, r, s] per arrival; supported bool[s, T]: whether the calibrating paths spent time there."""

    rates: F
    rewards: F
    lumps: F
    supported: npt.NDArray[np.bool_]


def leave_one_out(groups: F) -> F:
    """float64[1 + g, ...]: the total over groups, then the total without each group."""
    total = groups.sum(axis=0)
    return np.concatenate([total[None], total[None] - groups])


def _safe_ratio(top: F, bottom: F) -> F:
    return np.divide(top, bottom, out=np.zeros(np.broadcast_shapes(top.shape, bottom.shape)), where=bottom > 0)


def _nearest_supported(supported: npt.NDArray[np.bool_]) -> npt.NDArray[np.int64]:
    """For every cell the nearest supported one (the earlier of two equally near); itself where none is."""
    cells = np.arange(supported.size)
    known = np.flatnonzero(supported)
    if known.size == 0:
        return cells
    distance = np.abs(cells[:, None] - known[None, :])
    return np.asarray(known[np.argmin(distance, axis=1)], dtype=np.int64)


def project(record: SimulationRecord, *, path: int, arm: int, background: tuple[bool, ...]) -> Projection:
    """Memoryless projection of strategy ``arm`` calibrated on the paths of strategy ``path``.

    path == arm is "own"; path == comparator is "carried": per cell, the comparator's rate times the ratio of both
    strategies' integrated hazards on the comparator's paths. background: flag per clock. Raises CohortError if a state
    that can be reached was never visited in the calibrating paths.
    """
    tally, paths, arcs = record.hazards[path, arm], record.paths[path], record.layout.arcs
    exposure = leave_one_out(paths.exposure)
    integrated = leave_one_out(tally.integrated)
    supported = paths.exposure.sum(axis=0) > 0
    # an arc's cell counts as supported only if every leave-one-out replicate has exposure there
    stable = np.asarray((exposure > 0).all(axis=0))
    by_state = exposure.sum(axis=-1)
    rates = np.zeros_like(integrated)
    for a, (k, source, _) in enumerate(arcs):
        if background[k]:
            cells = _nearest_supported(stable[source])
            rates[:, a] = _safe_ratio(integrated[:, a], exposure[:, source])[:, cells]
        else:
            rates[:, a] = _safe_ratio(integrated[:, a].sum(axis=-1), by_state[:, source])[:, None]
    _refuse_unknown(record, path, arm, tally.integrated.sum(axis=(0, 2)), supported.any(axis=-1))
    return Projection(
        rates=rates,
        rewards=_safe_ratio(leave_one_out(tally.reward).sum(axis=-1), by_state[:, None, :]),
        lumps=_safe_ratio(
            leave_one_out(tally.lump).sum(axis=-1), leave_one_out(paths.entries).sum(axis=-1)[:, None, :]
        ),
        supported=stable,
    )


def _refuse_unknown(record: SimulationRecord, path: int, arm: int, expected: F, visited: npt.NDArray[np.bool_]) -> None:
    """expected: arrivals along each arc among all simulated patients, had they lived under the evaluated arm's hazards. Below
    one, the share of the cohort that would be stuck is less than one patient in the run."""
    layout = record.layout
    leaves = {source for _, source, _ in layout.arcs}
    for a, (k, source, target) in enumerate(layout.arcs):
        if visited[source] and not visited[target] and target in leaves and expected[a] > 1.0:
            raise CohortError(
                f"the cohort of {layout.strategies[arm]} would enter state {layout.states[target]} by clock "
                f"{layout.clocks[k]}, but the simulated patients of {layout.strategies[path]} spend no time there, so the "
                "rates out of it cannot be carried over. Simulate more patients, or give the comparator a rate into that state."
            )
