"""Who the reference's patients are: laws, truncation, correlation, resampled rows and first states."""

from __future__ import annotations

import math

import numpy as np
import pytest
from bound_builder import state, study
from scipy import stats

from microsim import rng
from microsim.reference.population import sample_attributes, sample_start
from microsim.study.bound import BoundAttribute, BoundPopulation, Law

N = 20_000
PEOPLE = range(N)
LAWS = {
    "normal": (Law("normal", {"mean": 70.0, "sd": 8.0}), stats.norm(70.0, 8.0)),
    "lognormal": (Law("lognormal", {"meanlog": 0.3, "sdlog": 0.6}), stats.lognorm(0.6, scale=math.exp(0.3))),
    "gamma": (Law("gamma", {"shape": 2.5, "rate": 4.0}), stats.gamma(2.5, scale=0.25)),
    "beta": (Law("beta", {"a": 2.0, "b": 3.0}), stats.beta(2.0, 3.0)),
    "uniform": (Law("uniform", {"low": -2.0, "high": 6.0}), stats.uniform(-2.0, 8.0)),
}


def _one(law: Law) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return sample_attributes(BoundPopulation((BoundAttribute("x", law),)), PEOPLE, seed=5, draw=0)["x"]


@pytest.mark.parametrize("kind", LAWS)
def test_a_law_is_the_quantile_of_the_attributes_own_uniform(kind: str) -> None:
    law, distribution = LAWS[kind]
    u = rng.uniforms(np.arange(N), seed=5, stream=rng.stream_id("attribute", "x"))
    np.testing.assert_allclose(distribution.cdf(_one(law)), u, rtol=1e-8, atol=1e-12)


@pytest.mark.parametrize("kind", LAWS)
def test_a_truncated_law_keeps_its_shape_between_the_bounds(kind: str) -> None:
    law, distribution = LAWS[kind]
    low, high = (float(b) for b in distribution.ppf([0.2, 0.7]))
    values = _one(Law(law.kind, law.params, within=(low, high)))
    assert low <= values.min() and values.max() <= high
    # false alarm once in 10,000 seeds, seed fixed; the untruncated law is the negative control
    assert stats.kstest((distribution.cdf(values) - 0.2) / 0.5, "uniform").pvalue > 1e-4
    assert stats.kstest((distribution.cdf(_one(law)) - 0.2) / 0.5, "uniform").pvalue < 1e-4


def test_categories_come_at_their_probabilities_and_constants_are_constant() -> None:
    codes = _one(Law("choice", {"p0": 0.2, "p1": 0.5, "p2": 0.3}))
    for code, p in enumerate((0.2, 0.5, 0.3)):
        assert abs(np.mean(codes == code) - p) < 4.5 * math.sqrt(p * (1 - p) / N)
    assert np.all(_one(Law("constant", {"value": 3.5})) == 3.5)


def test_the_copula_correlates_and_leaves_each_law_alone() -> None:
    attributes = (BoundAttribute("a", LAWS["normal"][0]), BoundAttribute("b", LAWS["gamma"][0]))
    joined = sample_attributes(BoundPopulation(attributes, ((1.0, 0.6), (0.6, 1.0))), PEOPLE, seed=5, draw=0)
    normals = [stats.norm.ppf(LAWS[k][1].cdf(joined[n])) for n, k in (("a", "normal"), ("b", "gamma"))]
    found = float(np.corrcoef(normals)[0, 1])
    assert abs(math.atanh(found) - math.atanh(0.6)) < 4.5 / math.sqrt(N)  # Fisher's transformation
    assert stats.kstest(joined["b"], LAWS["gamma"][1].cdf).pvalue > 1e-4
    apart = sample_attributes(BoundPopulation(attributes), PEOPLE, seed=5, draw=0)
    assert np.allclose(apart["a"], joined["a"], rtol=1e-9)  # the first attribute keeps its own uniform
    assert not np.any(apart["b"] == joined["b"])


def test_resampled_patients_are_whole_rows() -> None:
    rows = {"age": (50.0, 60.0, 70.0), "sex": (0.0, 1.0, 0.0)}
    people = BoundPopulation((BoundAttribute("age", None), BoundAttribute("sex", None)), rows=rows)
    got = sample_attributes(people, PEOPLE, seed=5, draw=0)
    assert np.array_equal(got["sex"], (got["age"] == 60.0).astype(float))
    for age in rows["age"]:
        assert abs(np.mean(got["age"] == age) - 1 / 3) < 4.5 * math.sqrt(2 / 9 / N)


def test_first_states_follow_their_probabilities_and_a_certain_one_needs_no_number() -> None:
    arm = study(([state("A", start=0.25), state("B"), state("C", start=0.75)], [])).arms[0]
    starts = sample_start(arm, PEOPLE, seed=5, draw=0)
    assert set(starts) == {"A", "C"}
    assert abs(starts.count("A") / N - 0.25) < 4.5 * math.sqrt(0.25 * 0.75 / N)
    certain = study(([state("A"), state("B", start=1.0)], [])).arms[0]
    assert set(sample_start(certain, PEOPLE, seed=5, draw=0)) == {"B"}
