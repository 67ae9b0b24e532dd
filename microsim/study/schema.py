"""Shape of study.toml: one model per table, from which the published JSON Schema is made.

Checks keys, types and fixed choices only. Whether names exist, formulas make sense and numbers agree is found later,
in the loader, where the rest of the study is known.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, StrictBool, StrictFloat, StrictInt, StrictStr

TimeUnit = Literal["year", "month", "week", "day"]
Number = Annotated[StrictInt | StrictFloat, Field(description="a number")]
Expression = Annotated[StrictStr | StrictInt | StrictFloat, Field(description="a number or a formula")]


class Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False, protected_namespaces=())


class Duration(Table):
    value: Number
    unit: TimeUnit


class Change(Table):
    """A change against the base: exactly one of the two."""

    times: Expression | None = None
    plus: Expression | None = None


class Materiality(Table):
    share: Number = 0.05
    amount: Number = 0.0


class DecisionTable(Table):
    comparator: StrictStr | None = None
    thresholds: list[Number]
    materiality: Materiality = Materiality()
    alpha: Number = 0.05


class DiscountingTable(Table):
    costs: Number = 0.0
    effects: Number = 0.0
    method: Literal["continuous", "annual"] = "continuous"


class CohortTable(Table):
    cycle: Number | Duration = Duration(value=1, unit="month")
    correction: Literal["none", "half-cycle", "simpson"] = "half-cycle"


class RunTable(Table):
    patients: StrictInt = Field(default=50_000, ge=1)
    seed: StrictInt = Field(default=1, ge=0, lt=2**64)


class CorrelationTable(Table):
    between: list[StrictStr]
    value: Number


class PopulationTable(Table):
    from_: StrictStr | None = Field(default=None, alias="from")
    correlation: list[CorrelationTable] = []


class AttributeTable(Table):
    """One law, or none of them when the column is read from the population file."""

    normal: dict[str, Expression] | None = None
    lognormal: dict[str, Expression] | None = None
    gamma: dict[str, Expression] | None = None
    beta: dict[str, Expression] | None = None
    uniform: dict[str, Expression] | None = None
    choice: dict[str, Expression] | None = None
    value: Expression | None = None
    levels: list[StrictStr] | None = None
    within: list[Number] | None = None
    label: StrictStr = ""


class EntryTable(Table):
    cost: dict[str, Expression] = {}
    qaly: Expression | None = None


class StateTable(Table):
    label: StrictStr = ""
    start: StrictBool | Expression = False
    absorbing: StrictBool = False
    dead: StrictBool | None = None
    utility: Expression | None = None
    cost: dict[str, Expression] = {}
    entry: EntryTable = EntryTable()


class HazardTable(Table):
    """Exactly one of fit, a family, rate, probability, table. ``unit``: time unit of the parameters, or what the
    numbers of a life table are ("yearly probability", "yearly rate")."""

    fit: StrictStr | None = None
    exponential: dict[str, Expression] | None = None
    weibull: dict[str, Expression] | None = None
    gompertz: dict[str, Expression] | None = None
    lognormal: dict[str, Expression] | None = None
    loglogistic: dict[str, Expression] | None = None
    rate: Expression | None = None
    probability: Expression | None = None
    per: Duration | None = None
    table: StrictStr | None = None
    by: StrictStr | None = None
    unit: StrictStr | None = None
    beyond: Literal["hold"] | None = None


class ClockTable(Table):
    from_: StrictStr | list[StrictStr] = Field(alias="from")
    to: StrictStr
    time: Literal["sojourn", "elapsed", "age"] = "sojourn"
    hazard: HazardTable
    ratio: Expression = 1
    background: StrictBool | None = None
    label: StrictStr = ""


class FitTable(Table):
    data: StrictStr
    from_: StrictStr = Field(alias="from")
    to: StrictStr
    family: StrictStr
    unit: TimeUnit | None = None
    time: Literal["sojourn", "elapsed"] = "sojourn"
    covariates: dict[str, Expression] = {}


class EntryChange(Table):
    cost: dict[str, Expression | Change] = {}
    qaly: Expression | Change | None = None


class StateChange(Table):
    utility: Expression | Change | None = None
    cost: dict[str, Expression | Change] = {}
    entry: EntryChange = EntryChange()


class ClockChange(Table):
    hazard: HazardTable | None = None
    ratio: Expression | Change | None = None


class OnceTable(Table):
    cost: dict[str, Expression] = {}


class StrategyTable(Table):
    label: StrictStr = ""
    inputs: dict[str, Expression] = {}
    states: dict[str, StateChange] = {}
    clocks: dict[str, ClockChange] = {}
    once: OnceTable = OnceTable()


class StudyFile(Table):
    format: Literal[1]
    title: StrictStr
    invented: StrictBool = False
    note: StrictStr = ""
    time: TimeUnit
    horizon: Number | Duration
    currency: StrictStr
    inputs: StrictStr | None = None
    decision: DecisionTable
    discounting: DiscountingTable = DiscountingTable()
    cohort: CohortTable = CohortTable()
    run: RunTable = RunTable()
    population: PopulationTable = PopulationTable()
    attributes: dict[str, AttributeTable] = {}
    states: dict[str, StateTable]
    clocks: dict[str, ClockTable]
    fits: dict[str, FitTable] = {}
    strategies: dict[str, StrategyTable]


def json_schema() -> dict[str, Any]:
    """JSON Schema of study.toml, format 1."""
    return StudyFile.model_json_schema(by_alias=True)
