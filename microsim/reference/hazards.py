"""A clock's hazard along its own time scale: the rate at c, what is consumed from c0 to c1, and the wait for an amount.

Written from the definitions in hazards/core.py with SciPy's special functions; the wait is found by a bracketed root
search, never by an inverse formula. Knows nothing of patients or states.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import optimize, special

from microsim.hazards.core import Hazard


def rate(hazard: Hazard, c: float, *, level: int = 0) -> float:
    """h(c), per study time unit; ``level`` is the row of a table."""
    p = hazard.params
    match hazard.family:
        case "exponential":
            return p["rate"]
        case "weibull":
            return float(p["shape"] / p["scale"] * (c / p["scale"]) ** (p["shape"] - 1.0))
        case "gompertz":
            return p["rate"] * math.exp(p["shape"] * c)
        case "lognormal":
            z = (math.log(c) - p["meanlog"]) / p["sdlog"]
            log_density = -0.5 * z * z - 0.5 * math.log(2.0 * math.pi)
            return math.exp(log_density - special.log_ndtr(-z)) / (p["sdlog"] * c)
        case "loglogistic":
            odds = (c / p["scale"]) ** p["shape"]
            return float(p["shape"] / c * odds / (1.0 + odds))
    if c < hazard.edges[0]:
        return 0.0
    cell = np.searchsorted(hazard.edges, c, side="right") - 1
    rates = hazard.rates[level]
    return rates[min(int(cell), len(rates) - 1)]


def consumed(hazard: Hazard, c0: float, c1: float, *, level: int = 0) -> float:
    """int_c0^c1 h(c) dc: the amount of a unit-exponential threshold that the hazard uses up from c0 to c1."""
    p = hazard.params
    if hazard.family == "exponential":
        return p["rate"] * (c1 - c0)
    if hazard.family == "gompertz":
        # exprel(x) = (exp(x) - 1) / x: one formula for either sign of the shape and for zero, with no digits lost
        return float(p["rate"] * np.exp(p["shape"] * c0) * (c1 - c0) * special.exprel(p["shape"] * (c1 - c0)))
    if hazard.family == "table":
        left = np.asarray(hazard.edges[:-1])
        right = np.append(hazard.edges[1:-1], np.inf)
        inside = np.clip(c1, left, right) - np.clip(c0, left, right)
        return float(inside @ np.asarray(hazard.rates[level]))
    return _from_zero(hazard, c1) - _from_zero(hazard, c0)


def _from_zero(hazard: Hazard, c: float) -> float:
    """-log S(c) of a family whose survivor function SciPy or a power gives directly."""
    if c == 0.0:
        return 0.0
    p = hazard.params
    if hazard.family == "weibull":
        return float((c / p["scale"]) ** p["shape"])
    if hazard.family == "lognormal":
        return -float(special.log_ndtr(-(math.log(c) - p["meanlog"]) / p["sdlog"]))
    return float(special.log1p((c / p["scale"]) ** p["shape"]))


def wait_for(hazard: Hazard, c0: float, amount: float, *, within: float, level: int = 0) -> float:
    """How long after c0 the hazard has consumed ``amount``; inf if that takes longer than about ``within``.

    The search brackets by doubling, so the answer does not depend on ``within`` where it is finite.
    """
    if amount == 0.0:
        return 0.0
    if math.isinf(amount):
        return math.inf

    def missing(wait: float) -> float:
        return consumed(hazard, c0, c0 + wait, level=level) - amount

    low, high = 0.0, 1.0
    while missing(high) < 0.0:
        if high > within:
            return math.inf
        low, high = high, 2.0 * high
    return float(optimize.brentq(missing, low, high, xtol=1e-300, rtol=4.0 * np.finfo(float).eps, maxiter=2000))
