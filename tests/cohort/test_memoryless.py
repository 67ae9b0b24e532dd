"""The deterministic cohort against closed forms, and its counting rules against their known errors."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from bound_builder import FORCE
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate
from scipy.linalg import expm

from microsim.cohort.memoryless import RULES, Timing, count_cycles, cycle_weights, generators, run_cycles, run_exact

NO_DISCOUNT = Timing(0.0, 0.0, False, 1.0)
ARCS = ((0, 0, 1), (1, 1, 0), (2, 0, 2), (3, 1, 2))


def _constant(*rates: float, cells: int) -> np.ndarray:
    return generators(np.repeat(np.array(rates)[:, None], cells, axis=1)[None], ARCS[: len(rates)], 3)


def _one_exit(rate: float, cells: int) -> np.ndarray:
    return generators(np.full((1, 1, cells), rate), ((0, 0, 1),), 2)


def test_time_in_a_state_with_exponential_sojourn_is_the_annuity() -> None:
    edges = np.linspace(0, 40, 161)
    found = run_exact(
        _one_exit(0.1, 160), edges=edges, start=np.array([1.0, 0.0]), timing=Timing(FORCE, 0.0, False, 1.0)
    )
    # closed form (1 - exp(-(a + r) T)) / (a + r)
    for time, rate in ((found.cost_time, 0.1 + FORCE), (found.effect_time, 0.1), (found.time, 0.1)):
        assert time[0, :, 0].sum() == pytest.approx(-np.expm1(-rate * 40) / rate, rel=1e-12)
    assert found.probability[0, 40, 0] == pytest.approx(np.exp(-1.0), rel=1e-12)


def test_a_loop_agrees_with_the_matrix_exponential_and_quadrature() -> None:
    edges = np.array([0.0, 0.7, 2.0, 5.0])
    q = _constant(0.8, 3.0, 0.1, 0.4, cells=3)
    start = np.array([0.6, 0.4, 0.0])
    found = run_exact(q, edges=edges, start=start, timing=Timing(FORCE, FORCE, False, 1.0))
    np.testing.assert_allclose(found.probability[0, -1], start @ expm(q[0, 0] * 5.0), rtol=1e-12)
    for j in range(3):
        exact = integrate.quad(lambda t, j=j: np.exp(-FORCE * t) * (start @ expm(q[0, 0] * t))[j], 0, 5, epsabs=1e-12)[
            0
        ]
        assert found.cost_time[0, :, j].sum() == pytest.approx(exact, rel=1e-9)


def test_rates_that_change_between_cells_are_marched_through() -> None:
    rates = np.array([[[0.1, 0.5]]])
    q = generators(rates, ((0, 0, 1),), 2)
    found = run_exact(q, edges=np.array([0.0, 2.0, 3.0]), start=np.array([1.0, 0.0]), timing=NO_DISCOUNT)
    assert found.probability[0, -1, 0] == pytest.approx(np.exp(-0.2 - 0.5), rel=1e-12)
    assert found.time[0, 1, 0] == pytest.approx(np.exp(-0.2) * -np.expm1(-0.5) / 0.5, rel=1e-12)


def test_annual_discounting_is_exact_when_cells_straddle_years() -> None:
    timing = Timing(FORCE, FORCE, True, 1.0)
    edges = np.array([0.0, 0.7, 1.4, 2.1, 2.5])
    found = run_exact(_one_exit(0.3, 4), edges=edges, start=np.array([1.0, 0.0]), timing=timing)
    exact = sum(1.035**-k * (np.exp(-0.3 * k) - np.exp(-0.3 * min(k + 1, 2.5))) / 0.3 for k in range(3))
    assert found.cost_time[0, :, 0].sum() == pytest.approx(exact, rel=1e-12)
    assert found.time[0, :, 0].sum() == pytest.approx(-np.expm1(-0.75) / 0.3, rel=1e-12)


def _counted(rule: str, *, cycles: int, cycle: float, rate: float, timing: Timing = NO_DISCOUNT) -> float:
    edges = np.arange(cycles + 1) * cycle
    trace = run_cycles(_one_exit(rate, cycles), edges=edges, start=np.array([1.0, 0.0]), cycle=cycle)
    return float(count_cycles(trace, cells=cycles, timing=timing, rule=rule).time[0, :, 0].sum())


# Common practice, no source: a constant 10 % monthly probability.
def test_ten_percent_a_month_gives_ten_starts_nine_and_a_half_halves_and_9_491_months() -> None:
    rate = -np.log(0.9)
    assert rate == pytest.approx(0.10536051565782630, rel=1e-12)
    assert _counted("none", cycles=600, cycle=1.0, rate=rate) == pytest.approx(10.0, rel=1e-9)
    assert _counted("half-cycle", cycles=600, cycle=1.0, rate=rate) == pytest.approx(9.5, rel=1e-9)
    exact = run_exact(_one_exit(rate, 600), edges=np.arange(601.0), start=np.array([1.0, 0.0]), timing=NO_DISCOUNT)
    assert exact.time[0, :, 0].sum() == pytest.approx(9.4912215810299, rel=1e-9)
    assert 1 - exact.probability[0, 12, 0] == pytest.approx(0.717570463519, rel=1e-9)


@pytest.mark.parametrize(("rule", "order"), [("none", 1), ("half-cycle", 2), ("simpson", 4)])
def test_counting_rules_converge_with_their_own_order(rule: str, order: int) -> None:
    exact = -np.expm1(-0.5 * 8) / 0.5
    errors = [abs(_counted(rule, cycles=n, cycle=8 / n, rate=0.5) - exact) for n in (16, 32, 64)]
    for coarse, fine in itertools.pairwise(errors):
        assert coarse / fine == pytest.approx(2**order, rel=0.08)


def test_weights_of_the_counting_rules_are_the_textbook_ones() -> None:
    np.testing.assert_allclose(cycle_weights(3, "none"), [1, 1, 1, 0])
    np.testing.assert_allclose(cycle_weights(3, "half-cycle"), [0.5, 1, 1, 0.5])
    np.testing.assert_allclose(cycle_weights(4, "simpson"), np.array([1, 4, 2, 4, 1]) / 3)
    np.testing.assert_allclose(cycle_weights(3, "simpson"), np.array([1, 4, 1, 0]) / 3 + [0, 0, 0.5, 0.5])


@pytest.mark.parametrize("rule", RULES)
def test_a_shorter_last_cycle_keeps_the_horizon(rule: str) -> None:
    edges = np.array([0.0, 2.0, 4.0, 5.3])
    stay = generators(np.zeros((1, 1, 3)), ((0, 0, 1),), 2)
    trace = run_cycles(stay, edges=edges, start=np.array([1.0, 0.0]), cycle=1.0)
    found = count_cycles(trace, cells=3, timing=NO_DISCOUNT, rule=rule)
    assert found.time[0, :, 0].sum() == pytest.approx(5.3, rel=1e-12)
    assert found.probability.shape == (1, 4, 2)


_RATE = st.floats(0.0, 5.0).map(lambda v: round(v, 3))


@settings(max_examples=60, deadline=None, derandomize=True)
@given(st.lists(st.tuples(_RATE, _RATE, _RATE, _RATE), min_size=1, max_size=5), st.floats(0, 0.2), st.booleans())
def test_nobody_is_lost_and_discounting_only_lowers(cells: list[tuple[float, ...]], force: float, annual: bool) -> None:
    rates = np.array(cells).T[None]
    edges = np.arange(len(cells) + 1) * 0.75
    timing = Timing(force, 0.0, annual, 1.0)
    q = generators(rates, ARCS, 3)
    found = run_exact(q, edges=edges, start=np.array([1.0, 0.0, 0.0]), timing=timing)
    np.testing.assert_allclose(found.probability.sum(axis=-1), 1.0, rtol=1e-9)
    assert found.probability.min() > -1e-12
    assert found.time.sum() == pytest.approx(edges[-1], rel=1e-9)
    assert np.all(found.cost_time <= found.time + 1e-9)
    trace = run_cycles(q, edges=edges, start=np.array([1.0, 0.0, 0.0]), cycle=0.25)
    np.testing.assert_allclose(trace.probability[:, ::3], found.probability, rtol=1e-9, atol=1e-9)
