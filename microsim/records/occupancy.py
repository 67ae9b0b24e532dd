"""State occupancy of a cohort calculation: where people are, and for how long, undiscounted and discounted."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

F = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Occupancy:
    """probability float64[..., T+1, s] at grid edges; time, cost_time, effect_time float64[..., T, s]: expected time in
    each state per cell (study time units), undiscounted and discounted at the rates for costs and for effects. Leading
    axes are replicates."""

    probability: F
    time: F
    cost_time: F
    effect_time: F
