"""Compiled families: cumulative hazard and its inverse over a block of patients, one vectorised loop per family.

Arrays are rows of scratch (float64[block]); ``w`` is how many entries are in use; ``par`` holds the family's
parameters in the order of ``core.PARAMETERS``. Tables are rows of uniform cells: first edge, inverse width and cell
count in ``par``; cumulative hazard and rates in flat arrays with one stretch per level. Knows nothing of studies.
"""

from __future__ import annotations

import numpy as np

from microsim._jit import helper, inlined, spliced
from microsim.hazards import vmath

EXPONENTIAL, WEIBULL, GOMPERTZ, LOGNORMAL, LOGLOGISTIC, TABLE = range(6)
CODES = {
    "exponential": EXPONENTIAL, "weibull": WEIBULL, "gompertz": GOMPERTZ, "lognormal": LOGNORMAL,
    "loglogistic": LOGLOGISTIC, "table": TABLE,
}  # fmt: skip

_SQRT_HALF = 0.7071067811865476
_INV_SQRT_PI = 0.5641895835477563


@inlined
def _erfc_scaled_large(x):
    """exp(x^2) erfc(x) for x >= 4 (Cody 1969, third region)."""
    z = 1.0 / (x * x)
    n = vmath.fma(z, 1.63153871373020978498e-2, 3.05326634961232344035e-1)
    n = vmath.fma(z, n, 3.60344899949804439429e-1)
    n = vmath.fma(z, n, 1.25781726111229246204e-1)
    n = vmath.fma(z, n, 1.60837851487422766278e-2)
    n = vmath.fma(z, n, 6.58749161529837803157e-4)
    d = z + 2.56852019228982242072
    d = vmath.fma(z, d, 1.87295284992346725209)
    d = vmath.fma(z, d, 5.27905102951428412248e-1)
    d = vmath.fma(z, d, 6.05183413124413191178e-2)
    d = vmath.fma(z, d, 2.33520497626869185443e-3)
    return (_INV_SQRT_PI - z * (n / d)) / x


@inlined
def _erfc_scaled_middle(x):
    """exp(x^2) erfc(x) for 0.46875 <= x < 4 (Cody 1969, second region)."""
    n = vmath.fma(x, 2.15311535474403846343e-8, 5.64188496988670089180e-1)
    n = vmath.fma(x, n, 8.88314979438837594118)
    n = vmath.fma(x, n, 6.61191906371416294775e1)
    n = vmath.fma(x, n, 2.98635138197400131132e2)
    n = vmath.fma(x, n, 8.81952221241769090411e2)
    n = vmath.fma(x, n, 1.71204761263407058314e3)
    n = vmath.fma(x, n, 2.05107837782607146532e3)
    n = vmath.fma(x, n, 1.23033935479799725272e3)
    d = x + 1.57449261107098347253e1
    d = vmath.fma(x, d, 1.17693950891312499305e2)
    d = vmath.fma(x, d, 5.37181101862009857509e2)
    d = vmath.fma(x, d, 1.62138957456669018874e3)
    d = vmath.fma(x, d, 3.29079923573345962678e3)
    d = vmath.fma(x, d, 4.36261909014324715820e3)
    d = vmath.fma(x, d, 3.43936767414372163696e3)
    d = vmath.fma(x, d, 1.23033935480374942043e3)
    return n / d


@inlined
def _erf_small(x):
    """erf(x) for |x| < 0.46875 (Cody 1969, first region)."""
    z = x * x
    n = vmath.fma(z, 1.85777706184603152673e-1, 3.16112374387056560)
    n = vmath.fma(z, n, 1.13864154151050156e2)
    n = vmath.fma(z, n, 3.77485237685302021e2)
    n = vmath.fma(z, n, 3.20937758913846947e3)
    d = z + 2.36012909523441209e1
    d = vmath.fma(z, d, 2.44024637934444173e2)
    d = vmath.fma(z, d, 1.28261652607737228e3)
    d = vmath.fma(z, d, 2.84423683343917062e3)
    return x * (n / d)


@inlined
def normal_cumulative_hazard(z):
    """-log(1 - Phi(z)): the cumulative hazard of a standard normal, accurate from -37 to the far right tail."""
    x = z * _SQRT_HALF
    a = abs(x)
    small = a < 0.46875
    clipped = a if a < 26.5 else 26.5
    scaled = _erfc_scaled_large(a if a >= 4.0 else 4.0) if a >= 4.0 else _erfc_scaled_middle(a)
    upper = 0.5 * scaled * vmath.exp(-clipped * clipped)  # 1 - Phi(|z|)
    right = a * a - vmath.log(0.5 * scaled)
    left = -vmath.log1p(-upper)
    middle = -vmath.log(0.5 - 0.5 * _erf_small(x)) if small else 0.0
    return middle if small else (right if x > 0.0 else left)


@helper
def cumulative(family, par, c, out, w):
    """out[i] = H(c[i]) of a parametric family, c >= 0."""
    if family == EXPONENTIAL:
        rate = par[0]
        for i in range(w):
            out[i] = rate * c[i]
    elif family == WEIBULL:
        shape, log_scale = par[0], np.log(par[1])
        for i in range(w):
            out[i] = vmath.exp(shape * (vmath.log(c[i]) - log_scale))
    elif family == GOMPERTZ:
        shape, rate = par[0], par[1]
        if shape == 0.0:
            for i in range(w):
                out[i] = rate * c[i]
        else:
            ratio = rate / shape
            for i in range(w):
                out[i] = ratio * vmath.expm1(shape * c[i])
    elif family == LOGNORMAL:
        mean, inverse_sd = par[0], 1.0 / par[1]
        for i in range(w):
            z = (vmath.log(c[i]) - mean) * inverse_sd
            out[i] = normal_cumulative_hazard(z if z > -37.0 else -37.0) if z > -37.0 else 0.0
    else:
        shape, log_scale = par[0], np.log(par[1])
        for i in range(w):
            out[i] = vmath.log1p(vmath.exp(shape * (vmath.log(c[i]) - log_scale)))


@helper
def inverse(family, par, h, out, w):
    """out[i] = smallest c with H(c) = h[i] of a parametric family; inf where the family never gets there."""
    if family == EXPONENTIAL:
        inverse_rate = 1.0 / par[0]
        for i in range(w):
            out[i] = h[i] * inverse_rate
    elif family == WEIBULL:
        inverse_shape, log_scale = 1.0 / par[0], np.log(par[1])
        for i in range(w):
            out[i] = vmath.exp(vmath.log(h[i]) * inverse_shape + log_scale)
    elif family == GOMPERTZ:
        shape, rate = par[0], par[1]
        if shape == 0.0:
            for i in range(w):
                out[i] = h[i] / rate
        else:
            ratio, inverse_shape = shape / rate, 1.0 / shape
            for i in range(w):
                x = ratio * h[i]
                out[i] = vmath.log1p(x) * inverse_shape if x > -1.0 else np.inf
    elif family == LOGNORMAL:
        mean, sd = par[0], par[1]
        for i in range(w):
            x = h[i]
            p = vmath.exp(-x)
            q = -vmath.expm1_near(-x) if x < 0.34 else 1.0 - p
            z = vmath.normal_quantile_tail(p, q, x)
            z = z if x > 0.0 else np.inf  # quantile of the survivor probability
            out[i] = vmath.exp(mean - sd * z) if x < np.inf else np.inf
    else:
        inverse_shape, log_scale = 1.0 / par[0], np.log(par[1])
        for i in range(w):
            x = h[i]
            # log(exp(x) - 1) = x + log(1 - exp(-x)) keeps large hazards finite
            out[i] = vmath.exp((x + vmath.log(-vmath.expm1(-x))) * inverse_shape + log_scale)


@spliced
def waiting_time(family, par, origin, from_zero, threshold, h, c, out, w):
    """out[i] = time from now until the clock at origin[i] has consumed threshold[i] (already divided by the ratio).

    h, c: scratch rows. ``from_zero``: every origin is 0 (a sojourn clock at entry).
    """
    if family == EXPONENTIAL or from_zero:
        inverse(family, par, threshold, out, w)
    elif family == GOMPERTZ:
        shape, rate = par[0], par[1]
        if shape == 0.0:
            inverse(family, par, threshold, out, w)
        else:  # relative to now, so that no digits are lost at high ages
            ratio, inverse_shape = shape / rate, 1.0 / shape
            for i in range(w):
                x = ratio * threshold[i] * vmath.exp(-shape * origin[i])
                out[i] = vmath.log1p(x) * inverse_shape if x > -1.0 else np.inf
    else:
        cumulative(family, par, origin, h, w)
        for i in range(w):
            h[i] = h[i] + threshold[i]
        inverse(family, par, h, c, w)
        for i in range(w):
            d = c[i] - origin[i]
            out[i] = d if d > 0.0 else 0.0


@spliced
def consumed(family, par, origin, from_zero, duration, h, c, out, w):
    """out[i] = H(origin + duration) - H(origin), not yet multiplied by the ratio. h, c: scratch rows."""
    if family == EXPONENTIAL or from_zero:
        cumulative(family, par, duration, out, w)
    elif family == GOMPERTZ and par[0] != 0.0:
        shape, ratio = par[0], par[1] / par[0]
        for i in range(w):
            out[i] = ratio * vmath.exp(shape * origin[i]) * vmath.expm1(shape * duration[i])
    else:
        cumulative(family, par, origin, h, w)
        for i in range(w):
            c[i] = origin[i] + duration[i]
        cumulative(family, par, c, out, w)
        for i in range(w):
            d = out[i] - h[i]
            out[i] = d if d > 0.0 else 0.0


@helper
def table_cumulative(par, level, cum, rate, c, out, w):
    """Cumulative hazard of a table at c[i]; level[i] is where the patient's stretch starts in ``cum`` and ``rate``.

    par: first edge, cell width, 1 / width, cells. Before the first edge the hazard is 0, beyond the last the rate holds.
    """
    first, width, inverse_width = par[0], par[1], par[2]
    last = np.int64(par[3]) - 1
    for i in range(w):
        x = (c[i] - first) * inverse_width
        x = x if x > 0.0 else 0.0
        j = np.int64(x)
        j = j if j < last else last
        k = level[i] + j
        out[i] = cum[k] + (x - j) * width * rate[k]


@helper
def table_inverse(par, level, cum, rate, h, out, w):
    """Smallest c with table cumulative hazard h[i]; inf beyond a last rate of zero."""
    first, width = par[0], par[1]
    cells = np.int64(par[3])
    for i in range(w):
        base = level[i]
        low, high = np.int64(0), cells - 1  # the cell whose stretch [cum, next cum) holds h
        while low < high:
            middle = (low + high + 1) >> 1
            if cum[base + middle] < h[i]:
                low = middle
            else:
                high = middle - 1
        beyond = h[i] - cum[base + low]
        r = rate[base + low]
        out[i] = first + low * width + (beyond / r if beyond > 0.0 else 0.0)
