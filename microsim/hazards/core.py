"""A hazard: the instantaneous rate of an event along one time scale, as a family name and numbers.

Parameterisations (S is the survivor function, t in the hazard's own time unit):
  exponential  rate             S = exp(-rate t)
  weibull      shape, scale     S = exp(-(t/scale)^shape)
  gompertz     shape, rate      h = rate exp(shape t), shape of either sign
  lognormal    meanlog, sdlog   log T normal
  loglogistic  shape, scale     S = 1 / (1 + (t/scale)^shape)
  table        piecewise constant; ``edges`` (n+1), ``rates`` (levels, n); the last rate continues beyond the last edge
Nothing here evaluates anything: formulas live in families.py (NumPy) and kernels.py (compiled).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

# Family -> parameter names, in kernel order. "time" parameters scale with the time unit, "rate" ones inversely.
PARAMETERS: dict[str, tuple[str, ...]] = {
    "exponential": ("rate",),
    "weibull": ("shape", "scale"),
    "gompertz": ("shape", "rate"),
    "lognormal": ("meanlog", "sdlog"),
    "loglogistic": ("shape", "scale"),
}


@dataclass(frozen=True, slots=True)
class Hazard:
    """family: a key of PARAMETERS or "table". For a table, ``by`` names the categorical attribute that selects the
    row of ``rates`` (row i for code i), or None for one row; ``edges`` are on the clock's scale in study time units."""

    family: str
    params: Mapping[str, float] = field(default_factory=dict)
    by: str | None = None
    edges: tuple[float, ...] = ()
    rates: tuple[tuple[float, ...], ...] = ()
