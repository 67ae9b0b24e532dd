"""Cohort whose rates depend on elapsed time at most: exact in continuous time, and in discrete cycles as practice builds it.

Rates are constant within grid cells, so transition matrices are matrix exponentials and time integrals come from an
augmented exponential (Van Loan 1978); nothing is simulated. Leading axes of ``generators`` are replicates.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.linalg import expm

from microsim.records.occupancy import Occupancy
from microsim.study.bound import Discounting

F = npt.NDArray[np.float64]

RULES = ("none", "half-cycle", "simpson")


@dataclass(frozen=True, slots=True)
class Timing:
    """How flows are discounted: forces per study time unit, and whether in annual steps."""

    cost_force: float
    effect_force: float
    annual: bool
    years_per_unit: float

    @classmethod
    def of(cls, discounting: Discounting, years_per_unit: float) -> Timing:
        return cls(*discounting.forces(years_per_unit), discounting.method == "annual", years_per_unit)

    def factor(self, force: float, time: F) -> F:
        """Discount factor at the given times."""
        if not self.annual:
            return np.exp(-force * time)
        years = np.floor(time * self.years_per_unit * (1 + 1e-12))
        return np.exp(-force / self.years_per_unit * years)


def generators(rates: F, arcs: tuple[tuple[int, int, int], ...], states: int) -> F:
    """Generator matrices float64[..., T, s, s] from arc rates float64[..., a, T]; rows sum to zero."""
    out = np.zeros((*rates.shape[:-2], rates.shape[-1], states, states))
    for a, (_, source, target) in enumerate(arcs):
        if source != target:
            out[..., source, target] += rates[..., a, :]
            out[..., source, source] -= rates[..., a, :]
    return out


def _integrals(generator: F, width: F, force: float) -> tuple[F, F]:
    """exp((Q - force) w) and int_0^w exp((Q - force) u) du, each float64[..., T, s, s]."""
    n = generator.shape[-1]
    block = np.zeros((*generator.shape[:-2], 2 * n, 2 * n))
    block[..., :n, :n] = (generator - force * np.eye(n)) * width[:, None, None]
    block[..., :n, n:] = np.eye(n) * width[:, None, None]
    whole = np.asarray(expm(block))
    return whole[..., :n, :n], whole[..., :n, n:]


def _march(start: F, steps: F) -> F:
    """Occupancy float64[..., T+1, s] at edges from one-cell transition matrices float64[..., T, s, s]."""
    cells = steps.shape[-3]
    out = np.empty((*steps.shape[:-3], cells + 1, steps.shape[-1]))
    out[..., 0, :] = start
    for j in range(cells):
        out[..., j + 1, :] = np.einsum("...i,...ij->...j", out[..., j, :], steps[..., j, :, :])
    return out


def _refined(edges: F, timing: Timing) -> tuple[F, npt.NDArray[np.int64]]:
    """Edges cut also where an annual discount factor steps, and the parent cell of each refined cell."""
    if not timing.annual:
        return edges, np.arange(edges.size - 1)
    years = np.arange(1, int(np.ceil(edges[-1] * timing.years_per_unit))) / timing.years_per_unit
    every = np.union1d(edges, years)
    every = every[np.concatenate([[True], np.diff(every) > 1e-9 * edges[-1]])]
    every[-1] = edges[-1]
    middle = 0.5 * (every[1:] + every[:-1])
    return every, np.searchsorted(edges, middle, side="right") - 1


def _per_parent(values: F, parent: npt.NDArray[np.int64], cells: int) -> F:
    """Sum refined cells, axis -2, into their parents."""
    first = np.searchsorted(parent, np.arange(cells))
    return np.asarray(np.add.reduceat(values, first, axis=-2))


def run_exact(generator: F, *, edges: F, start: F, timing: Timing) -> Occupancy:
    """Continuous time. generator: float64[..., T, s, s]; edges: float64[T+1]; start: float64[s]."""
    fine, parent = _refined(edges, timing)
    width = np.diff(fine)
    generator = generator[..., parent, :, :]
    cells = edges.size - 1
    steps, plain = _integrals(generator, width, 0.0)
    probability = _march(start, steps)
    before = probability[..., :-1, :]
    time = np.einsum("...ti,...tij->...tj", before, plain)
    discounted = {}
    for force in {timing.cost_force, timing.effect_force}:
        factor = timing.factor(force, fine[:-1])[:, None]
        if force == 0.0:
            discounted[force] = time
        elif timing.annual:
            discounted[force] = time * factor
        else:
            discounted[force] = (
                np.einsum("...ti,...tij->...tj", before, _integrals(generator, width, force)[1]) * factor
            )
    at_edges = np.searchsorted(fine, edges - 1e-9 * edges[-1])
    return Occupancy(
        probability=probability[..., at_edges, :],
        time=_per_parent(time, parent, cells),
        cost_time=_per_parent(discounted[timing.cost_force], parent, cells),
        effect_time=_per_parent(discounted[timing.effect_force], parent, cells),
    )


def cycle_weights(cycles: int, rule: str) -> F:
    """Weights float64[cycles+1] of membership at cycle boundaries, in cycles.

    "none": counted at the start of each cycle. "half-cycle": half a cycle at each end (trapezoid). "simpson": composite
    Simpson; with an odd number of cycles the last is a trapezoid.
    """
    weights = np.zeros(cycles + 1)
    if rule == "none":
        weights[:-1] = 1.0
        return weights
    even = cycles - cycles % 2 if rule == "simpson" else 0
    for k in range(0, even, 2):
        weights[k : k + 3] += np.array([1.0, 4.0, 1.0]) / 3.0
    for k in range(even, cycles):
        weights[k : k + 2] += 0.5
    return weights


@dataclass(frozen=True, slots=True)
class CycleTrace:
    """Membership at cycle boundaries, before any counting rule: times float64[K+1], probability float64[..., K+1, s],
    lengths float64[K] of the cycles, and the grid cell each cycle lies in."""

    times: F
    probability: F
    lengths: F
    cell: npt.NDArray[np.int64]


def run_cycles(generator: F, *, edges: F, start: F, cycle: float) -> CycleTrace:
    """March in cycles with transition matrices exp(Q x cycle); grid cells are whole numbers of cycles, the last cycle may
    be shorter."""
    horizon = float(edges[-1])
    cycles = int(np.ceil(horizon / cycle * (1 - 1e-12)))
    times = np.append(np.arange(cycles) * cycle, horizon)
    cell = np.searchsorted(edges, 0.5 * (times[1:] + times[:-1]), side="right") - 1
    lengths = np.diff(times)
    whole = np.asarray(expm(generator * cycle))
    steps = whole[..., cell, :, :]
    if not np.isclose(lengths[-1], cycle, rtol=1e-9):
        steps = steps.copy()
        steps[..., -1, :, :] = expm(generator[..., cell[-1], :, :] * lengths[-1])
    return CycleTrace(times, _march(start, steps), lengths, cell)


def count_cycles(trace: CycleTrace, *, cells: int, timing: Timing, rule: str) -> Occupancy:
    """Turn membership at cycle boundaries into expected time by a counting rule, discounted at the boundaries.

    Time counted at a boundary is credited to the grid cell of the cycle that counts it. A shorter last cycle is counted
    at its length by "none" and as a trapezoid otherwise.
    """
    lengths, cell = trace.lengths, trace.cell
    full = lengths.size if np.isclose(lengths[-1], lengths[0], rtol=1e-9) else lengths.size - 1
    weights = np.zeros((lengths.size, 2))  # of the start and the end of each cycle, in study time units
    weights[:full] = _cycle_ends(full, rule) * lengths[0]
    if full < lengths.size:
        weights[-1] = (lengths[-1], 0.0) if rule == "none" else (0.5 * lengths[-1], 0.5 * lengths[-1])

    def counted(factor: F) -> F:
        value = trace.probability * factor[:, None]
        per_cycle = value[..., :-1, :] * weights[:, :1] + value[..., 1:, :] * weights[:, 1:]
        return _per_parent(per_cycle, cell, cells)

    first = np.searchsorted(cell, np.arange(cells))
    return Occupancy(
        probability=trace.probability[..., np.append(first, lengths.size), :],
        time=counted(np.ones_like(trace.times)),
        cost_time=counted(timing.factor(timing.cost_force, trace.times)),
        effect_time=counted(timing.factor(timing.effect_force, trace.times)),
    )


def _cycle_ends(cycles: int, rule: str) -> F:
    """Boundary weights shared between the cycles on either side, float64[cycles, 2] for (start, end)."""
    total = cycle_weights(cycles, rule)
    if rule == "none":
        return np.stack([total[:-1], np.zeros(cycles)], axis=1)
    inner = 0.5 * total
    start, end = inner[:-1].copy(), inner[1:].copy()
    start[0], end[-1] = total[0], total[-1]
    return np.stack([start, end], axis=1)
