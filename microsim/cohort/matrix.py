"""A cohort from per-cycle transition probability matrices, as practice writes them down: trace and priced totals.

Knows only matrices, values per state and counting conventions; where the matrices come from is not its concern.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from microsim.errors import Fault, InputError

F = npt.NDArray[np.float64]

# Weights of membership at the start and at the end of a cycle.
CONVENTIONS = {"start": (1.0, 0.0), "end": (0.0, 1.0), "half-cycle": (0.5, 0.5)}
TOLERANCE = 1e-9


def _faults(matrices: F, start: F, source: str) -> list[Fault]:
    if matrices.ndim != 3 or matrices.shape[1] != matrices.shape[2]:
        remedy = "Give one square matrix, or one per cycle."
        return [Fault(source, "matrix", "the matrices are not square", remedy, str(matrices.shape))]
    out = []
    if start.shape != matrices.shape[1:2]:
        return [Fault(source, "start", "one share per state is needed", "Match the matrix.", str(start.shape))]
    if abs(start.sum() - 1.0) > TOLERANCE or (start < 0).any():
        out.append(
            Fault(source, "start", "shares must not be negative and sum to 1", "Correct them.", f"{start.sum():.12g}")
        )
    for k, matrix in enumerate(matrices):
        where = f"cycle {k + 1}" if len(matrices) > 1 else ""
        for i, row in enumerate(matrix):
            if not np.isfinite(row).all():
                out.append(
                    Fault(source, f"row {i + 1}", "a probability is not a finite number", "Correct it.", "", where)
                )
            elif (row < 0).any() or (row > 1).any():
                bad = row[(row < 0) | (row > 1)][0]
                out.append(
                    Fault(
                        source, f"row {i + 1}", "a probability lies outside [0, 1]", "Correct it.", f"{bad:.6g}", where
                    )
                )
            elif abs(row.sum() - 1.0) > TOLERANCE:
                out.append(
                    Fault(
                        source, f"row {i + 1}", "the row does not sum to 1", "Correct it.", f"{row.sum():.12g}", where
                    )
                )
    return out


def run_matrices(matrices: npt.ArrayLike, *, start: npt.ArrayLike, cycles: int, source: str = "matrix") -> F:
    """Trace float64[cycles+1, s] of membership at cycle boundaries.

    matrices: float[s, s] for every cycle, or float[k, s, s], the last of which holds from cycle k on. start: float[s].
    Raises InputError with every fault.
    """
    given = np.asarray(matrices, dtype=np.float64)
    steps = given[None] if given.ndim == 2 else given
    first = np.asarray(start, dtype=np.float64)
    faults = _faults(steps, first, source)
    if faults:
        raise InputError(faults)
    trace = np.empty((cycles + 1, first.size))
    trace[0] = first
    for k in range(cycles):
        trace[k + 1] = trace[k] @ steps[min(k, len(steps) - 1)]
    return trace


def price_trace(
    trace: F, values: npt.ArrayLike, *, convention: str, rate: float = 0.0, years_per_cycle: float = 1.0
) -> float:
    """Total value of a trace: sum over cycles of value x membership, discounted by (1 + rate)^-years at cycle boundaries.

    trace: float64[k+1, s]; values: per state and cycle, float[s] or float[k, s] (per cycle spent in the state);
    convention: "start", "end" or "half-cycle".
    """
    per_cycle = np.broadcast_to(np.asarray(values, dtype=np.float64), (trace.shape[0] - 1, trace.shape[1]))
    present = trace * (1.0 + rate) ** -(years_per_cycle * np.arange(trace.shape[0]))[:, None]
    at_start, at_end = CONVENTIONS[convention]
    return float(np.sum(per_cycle * (at_start * present[:-1] + at_end * present[1:])))
