"""Dominance, ICERs, net benefit and choices against brute force and worked cases."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from microsim.economics.frontier import incremental_analysis
from microsim.economics.net_benefit import choose, money_weights, net_benefit
from microsim.economics.valuation import outcome_unit


def _status(names: str, costs: list[float], qalys: list[float]) -> dict[str, tuple[str, float]]:
    return {p.strategy: (p.status, p.icer) for p in incremental_analysis(list(names), costs, qalys)}


def test_icers_run_along_the_frontier_and_never_against_a_dominated_strategy() -> None:
    found = _status("ABCDE", [100, 200, 250, 400, 150], [1.0, 1.1, 1.5, 2.0, 0.9])
    assert found["A"][0] == "reference" and math.isnan(found["A"][1])
    assert found["E"][0] == "dominated"
    assert found["B"][0] == "extendedly dominated"  # 1000 a QALY, then 125: a mix of A and C is cheaper
    assert found["C"] == ("frontier", pytest.approx(150 / 0.5))
    assert found["D"] == ("frontier", pytest.approx(150 / 0.5))


def test_exact_ties_are_settled_by_name_order_and_called_dominated() -> None:
    found = _status("AB", [100, 100], [1.0, 1.0])
    assert found["A"][0] == "reference" and found["B"][0] == "dominated"
    assert _status("AB", [100, 90], [1.0, 1.0])["A"][0] == "dominated"
    assert _status("AB", [100, 100], [1.0, 1.2])["A"][0] == "dominated"


_POINTS = st.lists(
    st.tuples(st.integers(0, 60).map(lambda v: 100.0 * v), st.integers(0, 40).map(lambda v: v / 10)),
    min_size=2,
    max_size=7,
)


@settings(max_examples=150, deadline=None, derandomize=True)
@given(_POINTS)
def test_the_frontier_is_whoever_is_optimal_at_some_threshold(points: list[tuple[float, float]]) -> None:
    names = [f"S{i}" for i in range(len(points))]
    costs, qalys = (np.array(v) for v in zip(*points, strict=True))
    positions = incremental_analysis(names, list(costs), list(qalys))
    on = {p.strategy for p in positions if p.status in ("reference", "frontier")}
    icers = [p.icer for p in positions if p.status == "frontier"]
    assert icers == sorted(icers)
    edges = [0.0, *icers, 2 * max(icers, default=1.0) + 1.0]
    for low, high in itertools.pairwise(edges):
        nb = net_benefit(costs, qalys, 0.5 * (low + high))
        assert any(names[i] in on for i in np.flatnonzero(nb >= nb.max() - 1e-9))
    # between two neighbouring ICERs the strategy whose turn it is has the highest net benefit
    frontier = [p for p in positions if p.strategy in on]
    for k, p in enumerate(frontier):
        threshold = 0.5 * (edges[k] + edges[k + 1])
        assert threshold * p.qaly - p.cost >= net_benefit(costs, qalys, threshold).max() - 1e-6


def test_money_weights_give_net_benefits_and_their_increments() -> None:
    money = np.array([1000.0, 2.0, 1500.0, 2.3])  # cost and QALYs of A, then of B
    assert money_weights(2, 1, None, 20_000) @ money == pytest.approx(20_000 * 2.3 - 1500)
    assert money_weights(2, 1, 0, 20_000) @ money == pytest.approx(20_000 * 0.3 - 500)


def test_a_choice_within_its_error_is_unresolved() -> None:
    se = np.array([[0.0, 10.0], [10.0, 0.0]])
    assert choose(np.array([100.0, 130.0]), se).resolved
    close = choose(np.array([100.0, 110.0]), se)
    assert (close.strategy, close.runner_up, close.lead) == (1, 0, 10.0) and not close.resolved


def test_every_kind_of_outcome_has_its_unit() -> None:
    units = {o: outcome_unit(o, currency="EUR 2026", time_unit="month") for o in
             ("ly_disc", "qaly", "cost_disc:care", "time:Home", "events:k", "entries:Home")}  # fmt: skip
    assert list(units.values()) == ["year", "QALY", "EUR 2026", "month", "count", "count"]
