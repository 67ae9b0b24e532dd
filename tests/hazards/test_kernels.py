"""Compiled families and elementary functions against SciPy and NumPy, into both tails."""

from __future__ import annotations

import numpy as np
import pytest

from microsim._jit import entry
from microsim.hazards import kernels, vmath
from microsim.hazards.core import PARAMETERS, Hazard
from microsim.hazards.families import cumulative, inverse

HAZARDS = [
    Hazard("exponential", {"rate": 0.3}),
    Hazard("weibull", {"shape": 0.7, "scale": 2.5}),
    Hazard("weibull", {"shape": 3.0, "scale": 0.02}),
    Hazard("gompertz", {"shape": 0.09, "rate": 0.01}),
    Hazard("gompertz", {"shape": 0.0, "rate": 0.01}),
    Hazard("gompertz", {"shape": -0.05, "rate": 0.04}),
    Hazard("lognormal", {"meanlog": -0.5, "sdlog": 0.8}),
    Hazard("lognormal", {"meanlog": 3.0, "sdlog": 0.05}),
    Hazard("loglogistic", {"shape": 1.7, "scale": 2.5}),
]


@entry
def _cumulative(family, par, c, out):
    kernels.cumulative(family, par, c, out, c.size)


@entry
def _inverse(family, par, h, out):
    kernels.inverse(family, par, h, out, h.size)


@entry
def _table(par, level, cum, rate, c, out, h, back):
    kernels.table_cumulative(par, level, cum, rate, c, out, c.size)
    kernels.table_inverse(par, level, cum, rate, h, back, h.size)


@entry
def _elementary(x, y, out):
    for i in range(x.size):
        out[0, i] = vmath.log(x[i])
        out[1, i] = vmath.exp(y[i])
        out[2, i] = vmath.log1p(y[i])
        out[3, i] = vmath.expm1(y[i])
        out[4, i] = vmath.power(x[i], y[i])


def _arguments(h: Hazard) -> tuple[int, np.ndarray]:
    values = [h.params[p] for p in PARAMETERS[h.family]]
    return kernels.CODES[h.family], np.array(values + [0.0] * (4 - len(values)))


@pytest.mark.parametrize("h", HAZARDS, ids=lambda h: h.family)
def test_compiled_cumulative_hazards_equal_scipys(h: Hazard) -> None:
    t = np.geomspace(1e-8, 1e3, 4001)
    expected = cumulative(h, t)
    keep = (expected > 1e-250) & (expected < 600)
    out = np.empty_like(t)
    _cumulative(*_arguments(h), t, out)
    # log-normal far tails amplify the rounding of log t by the local elasticity z
    np.testing.assert_allclose(out[keep], expected[keep], rtol=2e-12)


@pytest.mark.parametrize("h", HAZARDS, ids=lambda h: h.family)
def test_compiled_inverses_equal_scipys_and_never_means_inf(h: Hazard) -> None:
    need = np.concatenate([np.geomspace(1e-250, 600, 3001), [np.inf]])
    expected = inverse(h, need)
    out = np.empty_like(need)
    _inverse(*_arguments(h), need, out)
    finite = np.isfinite(expected) & (expected > 1e-300)  # exp flushes smaller results to zero
    np.testing.assert_allclose(out[finite], expected[finite], rtol=1e-12)
    assert np.all(np.isinf(out[np.isinf(expected)]))


def test_compiled_tables_agree_with_the_readable_ones_at_edges_inside_and_beyond() -> None:
    rates = np.array([[0.1, 0.0, 0.3], [0.2, 0.5, 0.0]])
    h = Hazard("table", by="sex", edges=(40.0, 40.5, 41.0, 41.5), rates=tuple(tuple(r) for r in rates))
    cum = np.concatenate([np.zeros((2, 1)), np.cumsum(rates * 0.5, axis=1)[:, :-1]], axis=1)
    c = np.tile(np.array([0.0, 40.0, 40.25, 40.5, 41.0, 41.5, 50.0]), 2)
    level = np.repeat([0, 1], 7)
    need = cumulative(h, c, level=level)
    out, back = np.empty_like(c), np.empty_like(c)
    _table(np.array([40.0, 0.5, 2.0, 3.0]), level * 3, cum.ravel(), rates.ravel(), c, out, need + 1e-9, back)
    np.testing.assert_allclose(out, need, rtol=1e-12)
    np.testing.assert_allclose(back, inverse(h, need + 1e-9, level=level), rtol=1e-12)
    assert np.isinf(back[-1])


def test_elementary_functions_are_exact_to_a_few_units_and_right_at_the_ends() -> None:
    rng = np.random.default_rng(1)
    x, y = np.exp(rng.uniform(-700, 700, 20_000)), rng.uniform(-0.99, 3, 20_000)
    out = np.empty((5, x.size))
    _elementary(x, y, out)
    for got, expected in zip(out[:4], (np.log(x), np.exp(y), np.log1p(y), np.expm1(y)), strict=True):
        np.testing.assert_allclose(got, expected, rtol=5e-16, atol=0)
    ends = np.array([0.0, np.inf, 5e-324, 1.0, -1.0])
    exponents = np.array([-800.0, 800.0, -np.inf, 0.0, np.inf])
    out = np.empty((5, 5))
    _elementary(ends, exponents, out)
    np.testing.assert_allclose(out[0], [-np.inf, np.inf, np.log(5e-324), 0.0, np.nan], rtol=1e-15)
    np.testing.assert_allclose(out[1], [0.0, np.inf, 0.0, 1.0, np.inf])


def test_powers_follow_numpy_for_negative_and_zero_bases() -> None:
    x = np.array([2.0, -2.0, -2.0, -2.0, 0.0, 0.0, 0.0, 1.0, 9.0])
    y = np.array([3.0, 3.0, 2.0, 0.5, 2.0, 0.0, -1.0, 77.0, 0.5])
    out = np.empty((5, x.size))
    _elementary(x, y, out)
    np.testing.assert_allclose(out[4], [8, -8, 4, np.nan, 0, 1, np.inf, 1, 3], rtol=1e-14)
