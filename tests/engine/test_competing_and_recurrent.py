"""Competing, recurrent and history-dependent events against closed forms and quadrature; |z| < 4.5, fixed seeds."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import numpy as np
import pytest
from bound_builder import ONE, clock, hazard, memory, one_exit, op, state, study
from scipy import integrate

from microsim.engine.run import Wants, simulate
from microsim.hazards.core import Hazard
from microsim.hazards.families import cumulative, rate, survival
from microsim.records.simulation import SimulationRecord
from microsim.study.bound import BoundAttribute, BoundStudy, Discounting, Law
from microsim.study.expression import Node, const

N = 40_000
# Computed with mpmath at 30 digits; printed figures are named in the column "source".
DATA = Path(__file__).parents[1] / "data" / "closed_forms"


def _values(*names: str) -> dict[str, float]:
    rows = [row for n in names for row in csv.DictReader((DATA / n).read_text(encoding="utf-8").splitlines())]
    return {row["id"]: float(row["value"]) for row in rows}


VALUES = _values("sojourns.csv", "competing.csv")


def _run(s: BoundStudy, *, patients: int = N, seed: int = 8) -> SimulationRecord:
    return simulate(s, patients=patients, seed=seed, threads=2, wants=Wants(tallies=False))


def _mean(r: SimulationRecord, outcome: str) -> float:
    return float(r.moments.mean[0, r.layout.outcomes.index(outcome)])


def _variance(r: SimulationRecord, outcome: str) -> float:
    return float(r.moments.covariance[r.layout.outcomes.index(outcome), 0, 0])


def _z(r: SimulationRecord, outcome: str, expected: float, sd: float | None = None) -> float:
    spread = np.sqrt(_variance(r, outcome)) if sd is None else sd
    return float((_mean(r, outcome) - expected) / (spread / np.sqrt(r.moments.patients)))


def _person(age: float) -> BoundAttribute:
    return BoundAttribute("age", Law("constant", {"value": age}))


def _race(back: bool) -> BoundStudy:
    """x and y race out of A; the loser's threshold is kept if y leads to a place one comes back from."""
    states = (state("A", start=1.0, utility=ONE), state("B", absorbing=not back), state("X", absorbing=True))
    clocks = [
        clock("x", "A", "X", hazard("weibull", shape=1.5, scale=10.0)),
        clock("y", "A", "B", hazard("weibull", shape=0.8, scale=12.0)),
    ]
    if back:
        clocks.append(clock("z", "B", "A", hazard("exponential", rate=2.0)))
    return study((states, clocks), horizon=5000.0)


def test_two_weibulls_of_different_shape_race_at_their_closed_odds() -> None:
    r = _run(_race(back=False))
    p = VALUES["CR1_p1"]
    assert abs(_z(r, "events:x", p, np.sqrt(p * (1 - p)))) < 4.5
    assert abs(_z(r, "time:A", VALUES["CR1_min"])) < 4.5
    assert abs(_z(r, "events:x", 0.48)) > 4.5


def test_interrupted_clocks_that_keep_their_thresholds_follow_the_same_law_as_fresh_ones() -> None:
    """Random time change: visits to A are independent races, so their number is geometric and its moments follow."""
    r = _run(_race(back=True))
    p = VALUES["CR1_p1"]
    assert abs(_z(r, "entries:B", (1 - p) / p, np.sqrt(1 - p) / p)) < 4.5
    assert abs(_z(r, "time:A", VALUES["CR1_min"] / p)) < 4.5
    assert abs(_z(r, "time:B", 0.5 * (1 - p) / p)) < 4.5
    # variance of a geometric number, its own standard error from the fourth central moment
    fourth = (1 - p) * (p * p - 9 * p + 9) / p**4
    se = np.sqrt((fourth - ((1 - p) / p**2) ** 2) / N)
    assert abs(_variance(r, "entries:B") - (1 - p) / p**2) < 4.5 * se


AGES = tuple(float(a) for a in range(50, 81, 2))
RECURRENT = {
    "exponential on elapsed": (hazard("exponential", rate=0.7), "elapsed"),
    "weibull on elapsed": (hazard("weibull", shape=1.8, scale=3.0), "elapsed"),
    "falling weibull on elapsed": (hazard("weibull", shape=0.5, scale=0.4), "elapsed"),
    "gompertz on elapsed": (hazard("gompertz", shape=-0.3, rate=2.0), "elapsed"),
    "lognormal on elapsed": (hazard("lognormal", meanlog=-1.0, sdlog=0.5), "elapsed"),
    "loglogistic on elapsed": (hazard("loglogistic", shape=3.0, scale=1.0), "elapsed"),
    "gompertz on age": (hazard("gompertz", shape=0.08, rate=0.003), "age"),
    "weibull on age": (hazard("weibull", shape=7.0, scale=50.0), "age"),
    "table on age": (Hazard("table", edges=AGES, rates=(tuple(0.1 * (i % 4) for i in range(15)),)), "age"),
}


@pytest.mark.parametrize("name", RECURRENT)
def test_recurrent_events_are_poisson_with_the_integrated_intensity(name: str) -> None:
    family, scale = RECURRENT[name]
    states = (state("A", start=1.0, utility=ONE), state("End", absorbing=True))
    clocks = (
        clock("again", "A", "A", family, scale=scale),
        clock("end", "A", "End", hazard("exponential", rate=1e-12)),
    )
    origin, horizon = (60.0 if scale == "age" else 0.0), 10.0
    r = _run(study((states, clocks), horizon=horizon, attributes=(_person(60.0),)))
    mean = float(np.diff(cumulative(family, [origin, origin + horizon]))[0])
    assert 1.0 < mean < 30.0
    assert abs(_z(r, "events:again", mean, np.sqrt(mean))) < 4.5
    assert abs(_variance(r, "events:again") - mean) < 4.5 * np.sqrt((mean + 2 * mean**2) / N)
    assert abs(_z(r, "events:again", 1.05 * mean, np.sqrt(mean))) > 4.5
    assert _mean(r, "time:A") == pytest.approx(horizon, rel=1e-9)


@pytest.mark.parametrize(("horizon", "key"), [(1.0, "ERL2_m_1.0"), (20.0, "ERL2_m_20.0")])
def test_renewals_of_a_two_stage_stay_follow_the_renewal_function(horizon: float, key: str) -> None:
    states = (state("S1", start=1.0, utility=ONE), state("S2"), state("End", absorbing=True))
    clocks = (
        clock("a", "S1", "S2", hazard("exponential", rate=0.5)),
        clock("b", "S2", "S1", hazard("exponential", rate=0.5)),
        clock("end", "S1", "End", hazard("exponential", rate=1e-12)),
    )
    assert abs(_z(_run(study((states, clocks), horizon=horizon)), "entries:S1", VALUES[key])) < 4.5


def _late_share(s: BoundStudy, names: tuple[str, ...], *, after: float) -> tuple[float, float]:
    """Share of time after ``after`` spent in the named states, with the standard error of its 40 group means."""
    r = simulate(s, patients=2000, seed=8, threads=2)
    rows = [r.layout.states.index(n) for n in names]
    exposure = r.paths[0].exposure[:, :, r.grid.time[:-1] >= after].sum(axis=2)
    shares = exposure[:, rows].sum(axis=1) / exposure.sum(axis=1)
    return float(shares.mean()), float(shares.std(ddof=1) / np.sqrt(shares.size))


def _ross() -> BoundStudy:
    def stay(mean: float, shape: float) -> Hazard:
        return hazard("weibull", shape=shape, scale=mean / math.gamma(1 + 1 / shape))

    states = (state("Good", start=1.0, utility=ONE), state("Fair"), state("Broken"))
    good, fair, broken = stay(5.0, 1.5), stay(2.0, 0.8), stay(1.0, 3.0)
    clocks = (
        clock("gf", "Good", "Fair", good, ratio=const(0.75)),
        clock("gb", "Good", "Broken", good, ratio=const(0.25)),
        clock("fb", "Fair", "Broken", fair),
        clock("bg", "Broken", "Good", broken, ratio=const(2 / 3)),
        clock("bf", "Broken", "Fair", broken, ratio=const(1 / 3)),
    )
    return study((states, clocks), horizon=400.0, cycle=2.5)


@pytest.mark.parametrize(("name", "key"), [("Good", "good"), ("Fair", "fair"), ("Broken", "broken")])
def test_semi_markov_long_run_fractions_depend_on_means_only(name: str, key: str) -> None:
    share, se = _late_share(_ross(), (name,), after=100.0)
    assert abs(share - VALUES[f"ROSS_521_{key}"]) < 4.5 * se
    assert se < 0.002


def test_an_alternating_renewal_process_is_up_for_its_share_of_the_mean() -> None:
    states = (state("Up1", start=1.0, utility=ONE), state("Up2"), state("Down"))
    clocks = (
        clock("u1", "Up1", "Up2", hazard("exponential", rate=0.5)),
        clock("u2", "Up2", "Down", hazard("exponential", rate=0.5)),
        clock("d", "Down", "Up1", hazard("weibull", shape=1.5, scale=1.0)),
    )
    share, se = _late_share(study((states, clocks), horizon=400.0, cycle=2.5), ("Up1", "Up2"), after=100.0)
    assert abs(share - VALUES["ALT1"]) < 4.5 * se


# Gompertz with mu_x = B c^x, B = .0003, c = 1.07; means and SDs printed in Dickson, Hardy and Waters, Table 2.1.
DHW = hazard("gompertz", shape=math.log(1.07), rate=0.0003)


@pytest.mark.parametrize("age", [0, 20, 50, 70, 80, 100])
def test_attained_age_drives_gompertz_life_expectancy_and_its_spread(age: int) -> None:
    states = (state("Alive", start=1.0, utility=ONE), state("Dead", absorbing=True))
    s = study(
        (states, (clock("d", "Alive", "Dead", DHW, scale="age"),)), horizon=150.0, attributes=(_person(float(age)),)
    )
    r = _run(s)
    mean, sd = VALUES[f"DHW_{age}_mean"], VALUES[f"DHW_{age}_sd"]
    assert abs(_z(r, "ly", mean, sd)) < 4.5
    # the standard error of an SD is at most sd / sqrt(n) for kurtosis up to 5
    assert abs(np.sqrt(_variance(r, "ly")) - sd) < 4.5 * sd / np.sqrt(N)


def test_clocks_on_three_scales_race_by_the_sum_of_their_hazards() -> None:
    table = Hazard("table", edges=AGES, rates=(tuple(0.01 * (1 + i) for i in range(15)),))
    early, mid = hazard("weibull", shape=0.7, scale=30.0), hazard("lognormal", meanlog=2.0, sdlog=0.8)
    states = (state("A", start=1.0, utility=ONE), *(state(n, absorbing=True) for n in ("X", "Y", "Z")))
    clocks = (
        clock("x", "A", "X", table, scale="age"),
        clock("y", "A", "Y", early, scale="elapsed"),
        clock("z", "A", "Z", mid),
    )
    r = _run(study((states, clocks), horizon=12.0, attributes=(_person(59.0),)))
    t = np.linspace(0.0, 12.0, 120_001)[1:] - 5e-5  # midpoints; table edges fall between them
    h = [rate(table, 59.0 + t), rate(early, t), rate(mid, t)]
    base = cumulative(table, 59.0)[0]
    alive = np.exp(-(cumulative(table, 59.0 + t) - base) - cumulative(early, t) - cumulative(mid, t))
    for name, expected in zip("xyz", (float((f * alive).sum() * 1e-4) for f in h), strict=True):
        # the midpoint rule is off by less than 1e-4 near the infinite start of y, far below the error
        assert abs(_z(r, f"events:{name}", expected)) < 4.5
    assert abs(_z(r, "ly", float(alive.sum() * 1e-4))) < 4.5


def test_a_clock_that_spans_states_does_not_notice_moves_between_them() -> None:
    """Death on the age clock from both states: every patient dies at the same age with and without an illness."""
    states = (state("Well", start=1.0, utility=ONE), state("Ill", utility=const(0.5)), state("Dead", absorbing=True))
    death = clock("death", ("Well", "Ill"), "Dead", DHW, scale="age", background=True)
    moves = (
        clock("fall", "Well", "Ill", hazard("exponential", rate=2.0)),
        clock("rise", "Ill", "Well", hazard("weibull", shape=0.6, scale=0.3)),
    )
    lives = []
    for clocks in ((death, *moves), (*moves, death), (death,)):
        kept = []
        s = study((states, clocks), horizon=40.0, attributes=(_person(60.0),))
        simulate(s, patients=400, seed=2, wants=Wants(tallies=False, outcomes=lambda first, c, k=kept: k.append(c)))
        lives.append(np.concatenate([c.outcomes[0, 0] for c in kept]))
    np.testing.assert_allclose(lives[0], lives[2], rtol=1e-10)
    np.testing.assert_array_equal(lives[0], lives[1])
    assert len(np.unique(lives[0])) > 300


def test_a_rate_proportional_to_visits_so_far_is_a_pure_birth_process() -> None:
    """Yule: visits(A) is geometric with mean exp(rate T); memory and thresholds must both be right event after event."""
    states = (state("A", start=1.0, utility=ONE), state("End", absorbing=True))
    clocks = (
        clock("birth", "A", "A", hazard("exponential", rate=0.5), ratio=memory("visits", "A")),
        clock("end", "A", "End", hazard("exponential", rate=1e-12)),
    )
    r = _run(study((states, clocks), horizon=4.0))
    grown = math.exp(2.0)
    assert abs(_z(r, "events:birth", grown - 1, math.sqrt(grown * (grown - 1)))) < 4.5
    # a geometric law on 1, 2, ... with mean m: fourth central moment (q / p^4)(p^2 - 9p + 9), q = 1 - p, p = 1 / m
    p = 1 / grown
    fourth = (1 - p) * (p * p - 9 * p + 9) / p**4
    assert abs(_variance(r, "events:birth") - (1 - p) / p**2) < 4.5 * np.sqrt((fourth - ((1 - p) / p**2) ** 2) / N)


REMEMBERED = {
    "at_entry": memory("at_entry", "elapsed"),
    "last_stay": memory("last_stay", "A"),
    "since_entry": memory("since_entry", "A"),
    "time_in": memory("time_in", "A"),
    "since_exit": op("mul", memory("last_stay", "A"), op("eq", memory("since_exit", "A"), 0.0)),
    "came_from": op("mul", memory("last_stay", "A"), memory("came_from", "A")),
    "never": op("mul", memory("last_stay", "A"), op("gt", memory("since_exit", "D"), 1e300)),
}


def _remembering(ratio: Node) -> BoundStudy:
    states = (state("A", start=1.0, utility=ONE), state("B"), state("D", absorbing=True))
    clocks = (
        clock("ab", "A", "B", hazard("exponential", rate=0.3)),
        clock("bd", "B", "D", hazard("exponential", rate=0.2), ratio=ratio),
    )
    return study((states, clocks), horizon=8.0)


def test_every_way_to_remember_the_first_stay_tells_the_same_lives() -> None:
    means = {name: _run(_remembering(ratio), patients=4000).moments.mean for name, ratio in REMEMBERED.items()}
    for name, mean in means.items():
        np.testing.assert_allclose(mean, means["at_entry"], rtol=1e-12, err_msg=name)


def test_a_hazard_proportional_to_the_first_stay_has_its_quadrature() -> None:
    r = _run(_remembering(REMEMBERED["last_stay"]))
    dead = integrate.quad(lambda s: 0.3 * math.exp(-0.3 * s) * -math.expm1(-0.2 * s * (8.0 - s)), 0, 8.0)[0]
    assert abs(_z(r, "events:bd", dead, math.sqrt(dead * (1 - dead)))) < 4.5
    memoryless = integrate.quad(lambda s: 0.3 * math.exp(-0.3 * s) * -math.expm1(-0.2 / 0.3 * (8.0 - s)), 0, 8.0)[0]
    assert abs(_z(r, "events:bd", memoryless)) > 4.5


WEIBULL = hazard("weibull", shape=0.7, scale=8.0)


def _dying(method: str, years_per_unit: float) -> BoundStudy:
    """Death costs 1000 and takes 0.25 QALY at once; living costs 12 a year; 50 at the start. Horizon 7.5 years."""
    living = const(12.0 * years_per_unit)
    states = (
        state("Alive", start=1.0, utility=const(0.8), costs={"care": living}),
        state("Dead", absorbing=True, entry_costs={"death": const(1000.0)}, entry_qaly=const(-0.25)),
    )
    family = hazard("weibull", shape=0.7, scale=8.0 / years_per_unit)
    return study(
        (states, (clock("d", "Alive", "Dead", family),)),
        horizon=7.5 / years_per_unit,
        years_per_unit=years_per_unit,
        discounting=Discounting(0.06, 0.015, method),
        once=({"care": 50.0}, {"care": 50.0}),
    )


def _expected(method: str, yearly: float) -> tuple[float, float]:
    """(int_0^7.5 v(t) S(t) dt, E v(T) 1{T <= 7.5}) by quadrature within each year."""
    v = (lambda t: (1 + yearly) ** -t) if method == "continuous" else (lambda t: (1 + yearly) ** -math.floor(t))
    flow = lump = 0.0
    for k in range(8):
        a, b = float(k), min(k + 1.0, 7.5)
        middle = (lambda t, k=k: (1 + yearly) ** -t) if method == "continuous" else (lambda t, k=k: v(float(k)))
        flow += integrate.quad(lambda t, m=middle: m(t) * survival(WEIBULL, t)[0], a, b)[0]
        if method == "annual":
            lump += v(a) * float(survival(WEIBULL, a)[0] - survival(WEIBULL, b)[0])
        else:
            # by parts, which has no infinite start: int v f = v(a) S(a) - v(b) S(b) - r int v S
            force = math.log1p(yearly)
            part = integrate.quad(lambda t: v(t) * survival(WEIBULL, t)[0], a, b)[0]
            lump += v(a) * survival(WEIBULL, a)[0] - v(b) * survival(WEIBULL, b)[0] - force * part
    return flow, float(lump)


@pytest.mark.parametrize("years_per_unit", [1.0, 1 / 12], ids=["years", "months"])
@pytest.mark.parametrize("method", ["continuous", "annual"])
def test_flows_and_amounts_are_discounted_each_at_its_own_rate_and_time(method: str, years_per_unit: float) -> None:
    r = _run(_dying(method, years_per_unit))
    (cost_flow, cost_lump), (effect_flow, effect_lump) = _expected(method, 0.06), _expected(method, 0.015)
    (flow, lump) = _expected("continuous", 0.0)
    expected = {
        "ly": flow,
        "ly_disc": effect_flow,
        "qaly": 0.8 * flow - 0.25 * lump,
        "qaly_disc": 0.8 * effect_flow - 0.25 * effect_lump,
        "cost:care": 50.0 + 12.0 * flow,
        "cost_disc:care": 50.0 + 12.0 * cost_flow,
        "cost:death": 1000.0 * lump,
        "cost_disc:death": 1000.0 * cost_lump,
        "cost": 50.0 + 12.0 * flow + 1000.0 * lump,
        "cost_disc": 50.0 + 12.0 * cost_flow + 1000.0 * cost_lump,
        "time:Alive": flow / years_per_unit,
    }
    for outcome, value in expected.items():
        assert abs(_z(r, outcome, value)) < 4.5, outcome
    assert abs(_z(r, "cost_disc:death", 1000.0 * effect_lump)) > 4.5  # rates exchanged


def test_discount_methods_differ_by_more_than_their_error() -> None:
    for yearly in (0.06, 0.015):
        continuous, annual = _expected("continuous", yearly), _expected("annual", yearly)
        assert annual[0] > continuous[0] and annual[1] > continuous[1]


def test_those_beyond_a_falling_hazards_plateau_never_fire() -> None:
    r = _run(one_exit(hazard("gompertz", shape=-0.05, rate=0.04), horizon=1e5))
    p = VALUES["D07_plateau"]
    assert p == pytest.approx(math.exp(-0.8), rel=1e-12)
    assert abs(_z(r, "events:death", 1 - p, math.sqrt(p * (1 - p)))) < 4.5


@pytest.mark.parametrize("family", [hazard("weibull", shape=2.0, scale=10.0)])
def test_a_whole_lifetime_of_weibull_has_its_error_function(family: Hazard) -> None:
    assert abs(_z(_run(one_exit(family, horizon=500.0)), "ly_disc", VALUES["W2_closed"])) < 4.5
