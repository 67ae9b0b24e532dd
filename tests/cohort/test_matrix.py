"""The published HIV combination-therapy cohort from its transition matrix, to the printed digit, and its traps."""

from __future__ import annotations

import csv
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest

from microsim.cohort.matrix import price_trace, run_matrices
from microsim.errors import InputError

# Chancellor et al. 1997 (PubMed 10169387), inputs as in Briggs, Claxton and Sculpher, Decision Modelling for Health
# Economic Evaluation (2006), exercise 2.5. Printed: 7.99 and 8.94 life-years, 44,663 and 50,602 GBP (from memory), ICER
# 6276 (read in the abstract). The column "value" holds the full computed figures.
DATA = Path(__file__).parents[1] / "data" / "cohort"


def _inputs() -> dict[str, float]:
    with (DATA / "06_hiv_inputs.csv").open(encoding="utf-8") as file:
        return {row["input"]: float(row["value"]) for row in csv.DictReader(file)}


def _expected() -> dict[tuple[str, str, str], tuple[float, str]]:
    with (DATA / "06_hiv.csv").open(encoding="utf-8") as file:
        return {(r["id"], r["arm"], r["quantity"]): (float(r["value"]), r["published"]) for r in csv.DictReader(file)}


INPUTS, EXPECTED = _inputs(), _expected()


def _matrix(digits: int | None = None) -> np.ndarray:
    out = np.zeros((4, 4))
    for name, count in INPUTS.items():
        if "->" in name:
            out["ABCD".index(name[0]), "ABCD".index(name[3])] = count
    out[3, 3] = 1.0
    out /= out.sum(axis=1, keepdims=True)
    return out if digits is None else np.round(out, digits)


def _combination(matrix: np.ndarray, cycles: int) -> np.ndarray:
    """Relative risk on every transition probability in the first two cycles."""
    treated = matrix * INPUTS["relative risk"]
    np.fill_diagonal(treated, 0.0)
    np.fill_diagonal(treated, 1.0 - treated.sum(axis=1))
    return np.stack([treated, treated, *[matrix] * (cycles - 2)])


def _arms(
    cycles: int, convention: str, *, digits: int | None = None, lamivudine: float | None = None
) -> Mapping[str, tuple[float, float]]:
    """arm -> (life-years undiscounted, cost discounted at 6 %)."""
    matrix, start = _matrix(digits), [1.0, 0.0, 0.0, 0.0]
    care = np.array([INPUTS[f"direct medical cost {s}"] + INPUTS[f"community cost {s}"] for s in "ABC"] + [0.0])
    alive = np.array([1.0, 1.0, 1.0, 0.0])
    mono = care + INPUTS["zidovudine per year"] * alive
    both = np.tile(mono, (cycles, 1))
    both[:2] += (INPUTS["lamivudine per year"] if lamivudine is None else lamivudine) * alive
    out = {}
    for arm, matrices, cost in (("mono", matrix, mono), ("comb", _combination(matrix, cycles), both)):
        trace = run_matrices(matrices, start=start, cycles=cycles)
        ly = price_trace(trace, alive, convention=convention)
        out[arm] = ly, price_trace(trace, cost, convention=convention, rate=0.06)
    return out


VARIANTS = {
    "HIV_base": lambda: _arms(20, "end"),
    "HIV_lam2086": lambda: _arms(20, "end", lamivudine=2086.0),
    "HIV_rounded": lambda: _arms(20, "end", digits=3),
    "HIV_halfcycle": lambda: _arms(20, "half-cycle"),
    "HIV_40cycles": lambda: _arms(40, "end"),
}


@pytest.mark.parametrize("variant", VARIANTS)
def test_the_hiv_example_is_reproduced_in_every_variant(variant: str) -> None:
    arms = VARIANTS[variant]()
    for arm, (ly, cost) in arms.items():
        assert ly == pytest.approx(EXPECTED[variant, arm, "dLY"][0], rel=1e-9)
        assert cost == pytest.approx(EXPECTED[variant, arm, "dcost"][0], rel=1e-9)
    (ly0, cost0), (ly1, cost1) = arms["mono"], arms["comb"]
    assert (cost1 - cost0) / (ly1 - ly0) == pytest.approx(EXPECTED[variant, "incremental", "ICER"][0], rel=1e-9)


def test_the_printed_figures_come_out_to_their_last_digit() -> None:
    arms = _arms(20, "end")
    assert [round(arms[a][0], 2) for a in ("mono", "comb")] == [7.99, 8.94]
    assert [round(arms[a][1]) for a in ("mono", "comb")] == [44663, 50602]
    icer = (arms["comb"][1] - arms["mono"][1]) / (arms["comb"][0] - arms["mono"][0])
    assert round(icer) == 6276


def test_the_trace_is_the_published_one_cycle_by_cycle() -> None:
    with (DATA / "06_hiv_trace.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    for arm, matrices in (("mono", _matrix()), ("comb", _combination(_matrix(), 20))):
        trace = run_matrices(matrices, start=[1, 0, 0, 0], cycles=20)
        given = [[float(r[s]) for s in ("A", "B", "C", "Dead")] for r in rows if r["arm"] == arm]
        np.testing.assert_allclose(trace[: len(given)], given, rtol=1e-12, atol=1e-15)


def test_every_fault_of_a_matrix_is_reported_at_once() -> None:
    bad = [[0.5, 0.6, 0.0], [-0.1, 1.1, 0.0], [0.0, 0.0, np.nan]]
    with pytest.raises(InputError) as caught:
        run_matrices(bad, start=[0.5, 0.4, 0.0], cycles=3)
    text = str(caught.value)
    assert len(caught.value.faults) == 4
    assert "sum to 1" in text and "outside [0, 1]" in text and "not a finite number" in text


def test_a_trace_needs_a_square_matrix_and_a_share_per_state() -> None:
    with pytest.raises(InputError, match="square"):
        run_matrices([[1.0, 0.0]], start=[1.0], cycles=1)
    with pytest.raises(InputError, match="one share per state"):
        run_matrices(np.eye(3), start=[1.0, 0.0], cycles=1)
