"""A hazard table of study.toml -> HazardSpec: family, parsed parameters and their time unit, a life table, or a fit.

Says how numbers are to be turned into a Hazard; the numbers themselves come at binding.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from microsim.hazards.core import PARAMETERS
from microsim.study.context import NOT_A_NUMBER, Context
from microsim.study.dimensions import PER_TIME, PLAIN, TIME, YEARS, Dim, factor_between
from microsim.study.formula import Formula, nearest
from microsim.study.parts import Attribute, HazardSpec
from microsim.study.schema import Expression, FitTable, HazardTable
from microsim.study.tables import LifeTable, parse_csv, read_life_table

NO_HAZARD = HazardSpec("exponential", params={"rate": NOT_A_NUMBER})
TABLE_UNITS = ("yearly probability", "yearly rate")
# Dimension of each parameter; what is not named is a plain number.
_DIMS: Mapping[tuple[str, str], Dim] = {
    ("exponential", "rate"): PER_TIME, ("weibull", "scale"): TIME, ("gompertz", "shape"): PER_TIME,
    ("gompertz", "rate"): PER_TIME, ("loglogistic", "scale"): TIME, ("lognormal", "mean"): TIME,
}  # fmt: skip


def parameter_dim(family: str, parameter: str) -> Dim:
    return _DIMS.get((family, parameter), PLAIN)


@dataclass(slots=True)
class HazardReader:
    """Reads hazards of base clocks and strategies against the same fits, attributes and life tables."""

    ctx: Context
    fits: Mapping[str, FitTable]
    attributes: tuple[Attribute, ...]
    tables: dict[tuple[str, str | None, str | None], LifeTable | None] = field(default_factory=dict)

    def read(self, table: HazardTable, key: str, *, scale: str) -> HazardSpec:
        """scale: the clock's time. Faults give a hazard of nan."""
        kinds = [k for k in ("fit", *PARAMETERS, "rate", "probability", "table") if getattr(table, k) is not None]
        if len(kinds) != 1:
            known = ", ".join(("fit", "rate", "probability", "table", *PARAMETERS))
            problem = f"the hazard is given in {len(kinds)} ways" if kinds else "the hazard is not given"
            self.ctx.fault(key, problem, f"Use exactly one of {known}.", value=", ".join(kinds))
            return NO_HAZARD
        kind = kinds[0]
        self._stray_keys(table, key, kind=kind)
        if kind == "fit":
            return self._fit(table, key, scale=scale)
        if kind == "table":
            return self._table(table, key, scale=scale)
        if kind in ("rate", "probability"):
            return self._constant(table, key, kind=kind)
        return self._family(table, key, family=kind)

    def _stray_keys(self, table: HazardTable, key: str, *, kind: str) -> None:
        allowed = {"table": ("by", "unit", "beyond"), "fit": (), "probability": ("per",)}.get(kind, ("unit",))
        for name in ("per", "by", "beyond", "unit"):
            if getattr(table, name) is not None and name not in allowed:
                self.ctx.fault(
                    f"{key}.{name}", f"{name} does not go with {kind}", "Remove it.", value=getattr(table, name)
                )

    def _fit(self, table: HazardTable, key: str, *, scale: str) -> HazardSpec:
        name = table.fit or ""
        if name not in self.fits:
            remedy = nearest(name, self.fits) if self.fits else "Add a table [fits.<name>]."
            self.ctx.fault(f"{key}.fit", f"unknown fit {name!r}", remedy)
            return NO_HAZARD
        if self.fits[name].time != scale:
            problem = f"the fit {name} runs on {self.fits[name].time} time, the clock on {scale}"
            self.ctx.fault(f"{key}.fit", problem, "Give both the same time.")
        return HazardSpec("fit", fit=name)

    def _constant(self, table: HazardTable, key: str, *, kind: str) -> HazardSpec:
        if kind == "rate":
            rate, scale = self._parameters({"rate": table.rate or 0}, key, family="exponential", unit=table.unit)
            return HazardSpec("exponential", params=rate, scale=scale, unit=table.unit or "")
        formula = self.ctx.formula(table.probability or 0, f"{key}.probability", memory=False)
        if table.per is None:
            self.ctx.fault(f"{key}.per", "a probability needs the time it belongs to",
                           'Write for example per = { value = 1, unit = "month" }.')  # fmt: skip
            return NO_HAZARD
        per = table.per.value * factor_between(table.per.unit, self.ctx.study_unit)
        if per <= 0:
            self.ctx.fault(f"{key}.per", "the time must be positive", "Correct it.", value=table.per.value)
            return NO_HAZARD
        return HazardSpec(
            "exponential",
            params={"probability": formula},
            form="probability",
            per=per,
            unit=f"{table.per.value:g} {table.per.unit}",
        )

    def _family(self, table: HazardTable, key: str, *, family: str) -> HazardSpec:
        raw: Mapping[str, Expression] = getattr(table, family)
        forms = [PARAMETERS[family], *([("mean", "sdlog")] if family == "lognormal" else [])]
        if not any(set(raw) == set(f) for f in forms):
            wanted = " or ".join("{" + ", ".join(f) + "}" for f in forms)
            self.ctx.fault(
                f"{key}.{family}", f"{family} is given by {wanted}", "Give exactly these.", value=", ".join(raw)
            )
            return NO_HAZARD
        params, scale = self._parameters(raw, f"{key}.{family}", family=family, unit=table.unit, unit_key=f"{key}.unit")
        return HazardSpec(
            family, params=params, form="mean" if "mean" in raw else "", scale=scale, unit=table.unit or ""
        )

    def _parameters(
        self, raw: Mapping[str, Expression], key: str, *, family: str, unit: str | None, unit_key: str = ""
    ) -> tuple[dict[str, Formula], float]:
        """Parsed parameters, and study units per time unit they are written in."""
        if unit is not None and unit not in YEARS:
            self.ctx.fault(unit_key or f"{key}.unit", f"unknown time unit {unit!r}", nearest(unit, YEARS))
            unit = None
        out = {}
        for name, expression in raw.items():
            dim = parameter_dim(family, name)
            at = f"{key}.{name}"
            if unit is None:
                remedy = (
                    ""
                    if dim == PLAIN
                    else f'Give the input a unit in inputs.csv ({dim}), or unit = "..." in the hazard.'
                )
                out[name] = self.ctx.formula(expression, at, dim=dim, memory=False, remedy=remedy)
            else:
                remedy = "Inputs with a unit are converted already: remove unit from the hazard."
                out[name] = self.ctx.formula(expression, at, dim=PLAIN, memory=False, remedy=remedy)
        return out, 1.0 if unit is None else factor_between(unit, self.ctx.study_unit)

    def _table(self, table: HazardTable, key: str, *, scale: str) -> HazardSpec:
        name = table.table or ""
        if table.unit not in TABLE_UNITS:
            remedy = 'Write unit = "yearly probability" or unit = "yearly rate".'
            self.ctx.fault(
                f"{key}.unit", "a life table says what its numbers are", remedy, value=table.unit or "nothing"
            )
        levels: tuple[str, ...] = ()
        if table.by is not None:
            by = next((a for a in self.attributes if a.name == table.by), None)
            if by is None or not by.levels:
                known = [a.name for a in self.attributes if a.levels]
                problem = f"{table.by!r} is not a categorical attribute"
                self.ctx.fault(f"{key}.by", problem, nearest(table.by, known))
                return NO_HAZARD
            levels = by.levels
        if scale == "age" and not any(a.name == "age" for a in self.attributes):
            self.ctx.fault(f"{key}.table", "a clock on age needs an attribute named age", "Add [attributes.age].")
        cached = (name, table.by, table.unit)
        if cached not in self.tables:
            self.tables[cached] = self._read_table(name, f"{key}.table", levels=levels, table=table)
        life = self.tables[cached]
        if life is None:
            return NO_HAZARD
        years = self.ctx.years_per_unit
        edges = (*(a / years for a in life.ages), (life.ages[-1] + 1) / years)
        rates = tuple(tuple(r * years for r in row) for row in life.rates)
        return HazardSpec("table", by=table.by, edges=edges, rates=rates, file=name, beyond=table.beyond == "hold")

    def _read_table(self, name: str, key: str, *, levels: tuple[str, ...], table: HazardTable) -> LifeTable | None:
        text = self.ctx.read(name, key)
        csv = parse_csv(text, file=name, required=("age",), faults=self.ctx.faults) if text is not None else None
        if csv is None:
            return None
        probability = table.unit != "yearly rate"
        return read_life_table(csv, levels=levels, by=table.by, probability=probability, faults=self.ctx.faults)
