"""Elementary functions as branch-free scalar code that the compiler turns into vector loops.

Every function is one expression of adds, fused multiply-adds, divisions, bit tricks and selects: no library call, no
branch. Errors are a few units in the last place (tests state them). Knows nothing of hazards.
"""

from __future__ import annotations

import numpy as np

from microsim._jit import bits_of, double_of, fma, inlined

_LN2_HI = 6.93147180369123816490e-01
_LN2_LO = 1.90821492927058770002e-10
_INV_LN2 = 1.4426950408889634
_ONE_BITS = np.uint64(0x3FF0000000000000)
_MAGIC_BITS = np.uint64(0x4330000000000000)  # bits of 2**52: turns a small unsigned integer into a double
_TWO52 = 4503599627370496.0
_ROUND = 6755399441055744.0  # 1.5 * 2**52: adding it rounds to the nearest integer
_ROOT_HALF_BITS = np.uint64(0x3FE6A09E667F3BCD)
_SHIFT_TO_ROOT = np.uint64(0x3FF0000000000000 - 0x3FE6A09E667F3BCD)
_MANTISSA = np.uint64(0x000FFFFFFFFFFFFF)
_S52 = np.uint64(52)
_TINY = 2.2250738585072014e-308


@inlined
def log(x):
    """Natural logarithm; -inf at 0, nan below, inf at inf."""
    small = x < _TINY
    y = x * 18014398509481984.0 if small else x  # 2**54 lifts subnormal numbers
    shifted = bits_of(y) + _SHIFT_TO_ROOT
    exponent = double_of((shifted >> _S52) | _MAGIC_BITS) - _TWO52
    k = exponent - (1077.0 if small else 1023.0)
    f = double_of((shifted & _MANTISSA) + _ROOT_HALF_BITS) - 1.0
    s = f / (2.0 + f)
    z = s * s
    # Remez coefficients of the classical argument reduction log(1+f) = f - f^2/2 + s (f^2/2 + R)
    r = fma(z, 1.479819860511658591e-01, 1.531383769920937332e-01)
    r = fma(z, r, 1.818357216161805012e-01)
    r = fma(z, r, 2.222219843214978396e-01)
    r = fma(z, r, 2.857142874366239149e-01)
    r = fma(z, r, 3.999999999940941908e-01)
    r = fma(z, r, 6.666666666666735130e-01)
    r = z * r
    h = 0.5 * f * f
    value = k * _LN2_HI - ((h - fma(s, h + r, k * _LN2_LO)) - f)
    value = value if x < np.inf else x
    value = value if x > 0.0 else (-np.inf if x == 0.0 else np.nan)
    return value


@inlined
def exp(x):
    """Exponential; 0 below -708, inf above 709.78, nan for nan."""
    y = x if x < 709.78 else 709.78
    y = y if y > -708.0 else -708.0
    kd = fma(y, _INV_LN2, _ROUND)
    k_bits = bits_of(kd)
    kd = kd - _ROUND
    r = fma(-kd, _LN2_LO, fma(-kd, _LN2_HI, y))
    p = fma(r, 1.0 / 6227020800.0, 1.0 / 479001600.0)
    p = fma(r, p, 1.0 / 39916800.0)
    p = fma(r, p, 1.0 / 3628800.0)
    p = fma(r, p, 1.0 / 362880.0)
    p = fma(r, p, 1.0 / 40320.0)
    p = fma(r, p, 1.0 / 5040.0)
    p = fma(r, p, 1.0 / 720.0)
    p = fma(r, p, 1.0 / 120.0)
    p = fma(r, p, 1.0 / 24.0)
    p = fma(r, p, 1.0 / 6.0)
    p = fma(r, p, 0.5)
    p = fma(r, p, 1.0)
    p = fma(r, p, 1.0)
    value = p * double_of((k_bits << _S52) + _ONE_BITS)
    value = value if x > -708.0 else 0.0
    value = value if x <= 709.78 else np.inf
    return value if x == x else x


@inlined
def log1p(x):
    """log(1 + x), accurate near 0 (Kahan's correction); -inf at -1, nan below."""
    u = 1.0 + x
    d = u - 1.0
    safe = d if d != 0.0 else 1.0
    value = log(u) * (x / safe)
    value = x if d == 0.0 else value
    return x if x == np.inf else (-np.inf if x == -1.0 else value)


@inlined
def expm1_near(x):
    """exp(x) - 1 for |x| < 0.34."""
    p = fma(x, 1.0 / 6227020800.0, 1.0 / 479001600.0)
    p = fma(x, p, 1.0 / 39916800.0)
    p = fma(x, p, 1.0 / 3628800.0)
    p = fma(x, p, 1.0 / 362880.0)
    p = fma(x, p, 1.0 / 40320.0)
    p = fma(x, p, 1.0 / 5040.0)
    p = fma(x, p, 1.0 / 720.0)
    p = fma(x, p, 1.0 / 120.0)
    p = fma(x, p, 1.0 / 24.0)
    p = fma(x, p, 1.0 / 6.0)
    p = fma(x, p, 0.5)
    return fma(x * x, p, x)


@inlined
def expm1(x):
    """exp(x) - 1, accurate near 0."""
    return expm1_near(x) if abs(x) < 0.34 else exp(x) - 1.0


@inlined
def normal_quantile_tail(p, q, minus_log_p):
    """Standard normal quantile of p, given q = 1 - p and -log(p) so that both tails are exact (Wichura 1988, AS 241)."""
    c = p - 0.5
    z = 0.180625 - c * c
    n = fma(z, 2509.0809287301226727, 33430.575583588128105)
    n = fma(z, n, 67265.770927008700853)
    n = fma(z, n, 45921.953931549871457)
    n = fma(z, n, 13731.693765509461125)
    n = fma(z, n, 1971.5909503065514427)
    n = fma(z, n, 133.14166789178437745)
    n = fma(z, n, 3.387132872796366608)
    d = fma(z, 5226.495278852545925, 28729.085735721942674)
    d = fma(z, d, 39307.89580009271061)
    d = fma(z, d, 21213.794301586595867)
    d = fma(z, d, 5394.1960214247511077)
    d = fma(z, d, 687.1870074920579083)
    d = fma(z, d, 42.313330701600911252)
    d = fma(z, d, 1.0)
    central = c * (n / d)
    r = np.sqrt(minus_log_p if c < 0.0 else -log(q))
    far = r > 5.0
    y = r - (5.0 if far else 1.6)
    n = fma(
        y,
        2.01033439929228813265e-7 if far else 7.7454501427834140764e-4,
        2.71155556874348757815e-5 if far else 0.0227238449892691845833,
    )
    n = fma(y, n, 0.0012426609473880784386 if far else 0.24178072517745061177)
    n = fma(y, n, 0.026532189526576123093 if far else 1.27045825245236838258)
    n = fma(y, n, 0.29656057182850489123 if far else 3.64784832476320460504)
    n = fma(y, n, 1.7848265399172913358 if far else 5.7694972214606914055)
    n = fma(y, n, 5.4637849111641143699 if far else 4.6303378461565452959)
    n = fma(y, n, 6.6579046435011037772 if far else 1.42343711074968357734)
    d = fma(
        y,
        2.04426310338993978564e-15 if far else 1.05075007164441684324e-9,
        1.4215117583164458887e-7 if far else 5.475938084995344946e-4,
    )
    d = fma(y, d, 1.8463183175100546818e-5 if far else 0.0151986665636164571966)
    d = fma(y, d, 7.868691311456132591e-4 if far else 0.14810397642748007459)
    d = fma(y, d, 0.0148753612908506148525 if far else 0.68976733498510000455)
    d = fma(y, d, 0.13692988092273580531 if far else 1.6763848301838038494)
    d = fma(y, d, 0.59983220655588793769 if far else 2.05319162663775882187)
    d = fma(y, d, 1.0)
    tail = n / d
    tail = -tail if c < 0.0 else tail
    return central if abs(c) <= 0.425 else tail


@inlined
def power(x, y):
    """x ** y as NumPy means it: 1 for y = 0, nan for a negative x and fractional y. Error grows as |y log x| units."""
    magnitude = exp(y * log(abs(x)))
    whole = np.floor(y) == y
    odd = whole & (np.floor(0.5 * y) * 2.0 != y)
    value = magnitude if x >= 0.0 else ((-magnitude if odd else magnitude) if whole else np.nan)
    return 1.0 if (y == 0.0) | (x == 1.0) else (value if (x == x) & (y == y) else np.nan)
