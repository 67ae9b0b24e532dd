"""The standing sentences of a report: section titles and leads, what a verdict means, assumptions, cautions."""

from __future__ import annotations

from microsim.report.inputs import ResultLike

TITLES = {
    "verdict": "The test behind the verdict",
    "decision": "Decision",
    "gap": "Where the models part",
    "occupancy": "State occupancy",
    "pathway": "Pathway",
    "fits": "Fitted sojourn times",
    "rates": "Projected rates",
    "outcomes": "All outcomes",
    "assumptions": "Assumptions and defaults",
    "manifest": "Manifest",
    "cautions": "Cautions",
}

LEADS = {
    "verdict": "A cohort may stand in for individual patients if the difference it makes to incremental net benefit is "
    "shown to lie within the tolerance the study declared beforehand, at every threshold.",
    "decision": "Both models answer the same decision problem from the same inputs. Read each strategy's rows against "
    "one another: differences down a column are due to model structure.",
    "gap": "The gap is individual-level minus cohort. Memory: what constant rates forget within the same strategy. "
    "Carrying: what changes when the comparator's rates are moved to another strategy. Cycle: what discrete steps add.",
    "occupancy": "Where patients are over time, and by how much the cohorts misplace them.",
    "fits": "Each curve is one transition on its own: stays that ended otherwise count as censored. Where a fit is "
    "drawn beyond the last patient at risk, it is extrapolation.",
    "rates": "The cohort's rates are expected events over time at risk, taken from the individual-level paths. Those "
    "carried to a strategy start from the comparator's paths.",
    "outcomes": "Means per patient over the horizon, under every model and cycle rule.",
}

MEANINGS = {
    "adequate": "At every declared threshold the gap lies within the tolerance: for this decision, patients' history "
    "may be left out.",
    "not adequate": "At one declared threshold at least, the gap lies outside the tolerance: leaving patients' history "
    "out changes the answer by more than the study tolerates.",
    "unresolved": "The interval of the gap reaches across the tolerance: this run cannot tell. More patients can.",
}

ASSUMPTIONS = (
    "Every transition is a clock with a hazard of its own; clocks out of a state compete, and the first to fire moves "
    "the patient.",
    "The memoryless cohort gives every transition a constant rate, except background transitions, which keep their "
    "dependence on time in every cohort.",
    "Strategies and models are compared on the same simulated patients; standard errors come from leaving out one "
    "block of patients at a time and recomputing everything.",
    "Monte Carlo errors say how far more patients would move a number. They carry no uncertainty about the inputs.",
)

CAUTIONS = (
    "Not validated for clinical use. Nothing here replaces local guidelines, the methods guide of the relevant agency, "
    "or the judgement of qualified practitioners.",
    "A verdict holds for this study: its pathway, inputs, thresholds and tolerance. It says nothing of other decisions "
    "about the same disease.",
    "Carried rates repeat a convention of practice. They are no causal estimate of what a strategy does.",
    "A cohort with a strategy's own rates reproduces some outcomes by construction. Such agreement is no evidence that "
    "history does not matter, and it never earns the verdict.",
    "A fitted curve that agrees with the data may still extrapolate badly; judge it against clinical knowledge and "
    "outside evidence.",
)

INVENTED = "The data of this study are invented. No result here describes any real treatment or patient."


def study_warnings(result: ResultLike) -> list[str]:
    """What the study's own check remarked on without refusing it."""
    return [f"Remark on the study: {text}" for text in result.summary.get("warnings", ())]


def all_cautions(result: ResultLike) -> list[str]:
    """The study's own cautions after the standing ones, each once."""
    own = [str(text) for text in result.summary.get("cautions", ())]
    invented = [INVENTED] if result.summary.get("invented", False) else []
    return list(dict.fromkeys([*invented, *CAUTIONS, *own]))
