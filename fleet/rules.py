"""Settlement rules as data: which days, which hours, which meter, how performance becomes a share of pay.

Owns the fields of a rule, the presets under the names the trade gives them and the search by name. Leaves
the arithmetic to baseline.py (load) and money.py (pay). A rule is frozen into the event record as JSON.
"""

from collections.abc import Mapping, Sequence
from difflib import get_close_matches
from itertools import pairwise
from types import MappingProxyType
from typing import Final, Literal, Self

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from fleet.errors import Problem, Refused

Fraction = Field(default=None, ge=0.0, le=5.0)


class SettlementRule(BaseModel):
    """One rule; hours are counted from the event's start or end, and all fields go into the record."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)

    name: str = Field(min_length=1)
    version: int = Field(default=1, ge=1)
    kind: Literal["like_days", "before_after", "temperature_regression", "maximum_base_load"] = "like_days"
    """temperature_regression: fitted on the used days. maximum_base_load: one flat level from them."""
    stream: Literal["building", "plant"] = "building"
    """What is settled on: the building's meter, or the cooling plant's sub-meter."""

    look_back_days: int = Field(default=45, ge=1, le=400)
    pool_days: int = Field(default=10, ge=1, le=400)
    """Y: the most recent like days."""
    take_days: int = Field(default=10, ge=1, le=400)
    """X: how many of the pool are averaged."""
    rank: Literal["recent", "highest", "middle", "nearest_weather"] = "recent"
    """By the mean over the event hours; for absorb events `highest` takes the lowest. nearest_weather: by how
    close the day's highest dry bulb is to the event day's."""
    day_classes: Literal["weekday_weekend", "all_days"] = "weekday_weekend"
    """Whether Saturdays and Sundays (and holidays) are like days of a working day."""
    holidays: Literal["excluded", "as_weekend"] = "excluded"
    exclude_event_days: bool = True
    exclude_day_before_event: bool = False
    exclude_unusual_modes: bool = True
    """Days on which the plant ran in another mode than usual (tank or chiller out, recovery, test)."""
    low_usage_fraction: float | None = Fraction
    """Pool days below this share of the pool's mean are replaced by older ones; None = no test."""
    minimum_days: int = Field(default=5, ge=1, le=400)
    when_too_few: Literal["before_after", "highest_event_days", "refuse"] = "before_after"

    adjustment: Literal["none", "ratio", "additive"] = "none"
    adjustment_from_h: float = Field(default=4.0, gt=0.0, le=48.0)
    adjustment_to_h: float = Field(default=1.0, ge=0.0, le=48.0)
    """The adjustment window runs from `from` to `to` hours before the event's start."""
    cap_fraction: float | None = Fraction
    """c: limit of the adjustment; None = none. Additive: c x the mean baseline of the event hours."""
    cap_form: Literal["difference", "ratio"] = "difference"
    """[1-c, 1+c], or symmetric in ratio [1/(1+c), 1+c]."""
    small_base_fraction: float = Field(default=0.1, ge=0.0, le=1.0)
    """Window base at or below this share of the used days' peak: additive takes the place of ratio."""

    pre_charge_guard: Literal["off", "tank", "tank_or_plant"] = "off"
    """Adjust on load without the power that charges tanks: less the tank sub-meter; where there is none, and the
    rule averages like days of the building's meter, less the plant's. Not the plant's in a regression: its usual
    power says nothing of the event day's weather."""
    temperature_knots_c: tuple[float, ...] = (10.0, 16.0, 22.0, 28.0)
    """Regression: dry bulbs at which the slope may change."""

    before_h: float = Field(default=1.0, ge=0.0, le=24.0)
    before_buffer_h: float = Field(default=0.0, ge=0.0, le=24.0)
    after_h: float = Field(default=0.0, ge=0.0, le=24.0)
    after_buffer_h: float = Field(default=0.0, ge=0.0, le=24.0)
    """Before / after: mean of both windows, each that far from the event; also used when days are too few."""

    performance_by: Literal["interval", "hour", "event"] = "interval"
    """What floor_intervals and cap_intervals look at: each interval, each hour counted from the event's start,
    or the whole window."""
    floor_intervals: bool = False
    """Negative ones count as zero in the performance factor; False: they net, and the paid share's floor says
    whether a negative factor is charged."""
    cap_intervals: bool = False
    """None counts above its commitment in the performance factor."""
    performance_decimals: int | None = Field(default=None, ge=0, le=9)
    """The factor is rounded half-up to so many decimals; None = not rounded."""
    performance_formula: Literal["proportional", "linear", "ladder"] = "proportional"
    performance_target: float = Field(default=1.0, gt=0.0, le=2.0)
    performance_slope: float = Field(default=2.0, gt=0.0, le=20.0)
    """linear: share = max(0, 1 - slope x (target - factor))."""
    ladder: tuple[tuple[float, float], ...] = ()
    """ladder: (lower bound, share) in rising order, lower bound inclusive; below the first the share is 0."""
    performance_gate: float | None = Fraction
    """Paid only where the factor is MORE than this; None = no gate."""
    performance_floor: float | None = Field(default=None, ge=-5.0, le=5.0)
    performance_cap: float | None = Field(default=None, ge=-5.0, le=5.0)
    """Limits of the paid share; None = the fleet's settings."""
    netting: Literal["site", "portfolio"] = "site"
    """portfolio: all sites under the rule earn by their joint factor; amounts are shared out to the cent."""
    recovery_netting: Literal["none", "until_midnight", "until_full"] = "none"
    """Energy taken back after the own window, until local midnight or until the tank is full again, is taken off
    what was delivered before performance and pay; energy given beyond the window is never added."""
    firm_level_kw: float | None = Field(default=None, ge=0.0)
    firm_level_charge_per_kwh: float = Field(default=0.0, ge=0.0)
    """Charged on every kWh metered above firm_level_kw in the site's window (absorb: below it); None = no level."""
    source: str = ""
    """Where the rule comes from, and how surely: READ, or from memory."""

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        faults = [
            (self.take_days > self.pool_days, "take_days is above pool_days"),
            (self.minimum_days > self.pool_days, "minimum_days is above pool_days"),
            (
                self.adjustment != "none" and self.adjustment_from_h <= self.adjustment_to_h,
                "adjustment_from_h must be more hours before the event than adjustment_to_h",
            ),
            (
                self.kind == "before_after" and self.before_h + self.after_h <= 0,
                "before_h and after_h are both 0",
            ),
            (self.performance_formula == "ladder" and not self.ladder, "a ladder with no rungs"),
            (_not_rising([bound for bound, _ in self.ladder]), "the ladder's lower bounds do not rise"),
            (_not_rising(self.temperature_knots_c), "temperature_knots_c do not rise"),
            (
                self.kind == "temperature_regression" and self.rank == "nearest_weather",
                "a regression takes its days by recent, highest or middle, not by nearest_weather",
            ),
            (
                self.firm_level_charge_per_kwh > 0 and self.firm_level_kw is None,
                "firm_level_charge_per_kwh without firm_level_kw",
            ),
            (
                None not in (self.performance_floor, self.performance_cap)
                and (self.performance_floor or 0.0) > (self.performance_cap or 0.0),
                "performance_floor is above performance_cap",
            ),
        ]
        found = [text for wrong, text in faults if wrong]
        if found:
            raise ValueError("; ".join(found))
        return self

    @property
    def needs_weather(self) -> bool:
        """Dry bulb of the days looked at is part of the rule."""
        return self.kind == "temperature_regression" or self.rank == "nearest_weather"

    @property
    def order_of_rounding(self) -> str:
        """The order of limits and rounding in words, derived from the fields so that it cannot disagree."""
        steps = ["delivered kW per interval unrounded"]
        if self.floor_intervals or self.cap_intervals:
            each = {"interval": "intervals", "hour": "hours", "event": "windows"}[self.performance_by]
            if self.floor_intervals:
                steps.append(f"negative {each} to zero")
            if self.cap_intervals:
                steps.append(f"{each} capped at their commitment")
        steps.append("energy over the site's window")
        if self.recovery_netting != "none":
            until = {"until_midnight": "local midnight", "until_full": "the tank is full again"}
            steps.append(f"less the energy taken back until {until[self.recovery_netting]}")
        decimals = self.performance_decimals
        rounded = "unrounded" if decimals is None else f"rounded half-up to {decimals} decimals"
        steps.append(f"performance factor {rounded}")
        if self.performance_gate is not None:
            steps.append(f"nothing unless it is more than {self.performance_gate:g}")
        steps.append(f"{self.performance_formula} share, floor and cap")
        if self.netting == "portfolio":
            steps.append(
                "all sites under the rule earn by their joint factor; left-over units of money go by largest "
                "remainder, ties by site id"
            )
        if self.firm_level_kw is not None:
            steps.append(
                f"{self.firm_level_charge_per_kwh:g} per kWh beyond the firm level of {self.firm_level_kw:g} kW"
            )
        steps.append("each line rounded half-up to the currency's minor unit")
        steps.append("total = sum of the lines")
        return "; ".join(steps)


def _not_rising(values: Sequence[float]) -> bool:
    return any(later <= earlier for earlier, later in pairwise(values))


MEMORY: Final = "figures from memory of utility tariffs, whose texts could not be read"
PEER: Final = "NAESB WEQ-015 Baseline Type-I, by name; " + MEMORY
PRESET_FIELDS: Final[Mapping[str, Mapping[str, object]]] = {
    "ten_of_ten": {
        "adjustment": "ratio",
        "adjustment_from_h": 4.0,
        "adjustment_to_h": 1.0,
        "cap_fraction": 0.2,
        "source": PEER,
    },
    "high_five_of_ten": {
        "take_days": 5,
        "rank": "highest",
        "adjustment": "ratio",
        "adjustment_from_h": 4.0,
        "adjustment_to_h": 2.0,
        "cap_fraction": 0.2,
        "source": PEER,
    },
    "high_four_of_five": {
        "pool_days": 5,
        "take_days": 4,
        "rank": "highest",
        "minimum_days": 4,
        "low_usage_fraction": 0.25,
        "adjustment": "additive",
        "adjustment_from_h": 4.0,
        "adjustment_to_h": 1.0,
        "source": PEER,
    },
    "middle_eight_of_ten": {
        "take_days": 8,
        "rank": "middle",
        "adjustment": "ratio",
        "adjustment_from_h": 4.0,
        "adjustment_to_h": 1.0,
        "cap_fraction": 0.2,
        "cap_form": "ratio",
        "source": PEER + "; scalar adjustment with a cap symmetric in ratio",
    },
    "weather_matched_days": {
        "look_back_days": 90,
        "pool_days": 90,
        "take_days": 4,
        "rank": "nearest_weather",
        "minimum_days": 4,
        "adjustment": "additive",
        "adjustment_from_h": 4.0,
        "adjustment_to_h": 1.0,
        "source": PEER + "; four days nearest in highest dry bulb of the last 90",
    },
    "temperature_regression": {
        "kind": "temperature_regression",
        "look_back_days": 60,
        "pool_days": 60,
        "take_days": 60,
        "minimum_days": 10,
        "adjustment": "additive",
        "adjustment_from_h": 4.0,
        "adjustment_to_h": 1.0,
        "source": "time of week and temperature after Mathieu, Price, Kiliccote and Piette, IEEE Trans. Smart "
        "Grid 2 (2011), from memory; one set of slopes, no split by occupancy",
    },
    "maximum_base_load": {
        "kind": "maximum_base_load",
        "pool_days": 20,
        "take_days": 5,
        "rank": "highest",
        "source": "NAESB WEQ-015 Maximum Base Load, by name; the level is the mean of the five highest days' "
        "highest reading in the event hours, " + MEMORY,
    },
    "meter_before_after": {
        "kind": "before_after",
        "before_h": 1.0,
        "source": "NAESB WEQ-015 Meter Before / Meter After, from memory: the hour before against the event; "
        "nothing after the event, where the plant's restart would lift the baseline",
    },
    "three_before_two_after": {
        "kind": "before_after",
        "before_h": 3.0,
        "before_buffer_h": 1.0,
        "after_h": 2.0,
        "after_buffer_h": 1.0,
        "source": "NAESB WEQ-015 Meter Before / Meter After, by name; three hours before and two after the "
        "event, one left out on each side, " + MEMORY,
    },
}


def _presets() -> dict[str, SettlementRule]:
    """Every preset on the building's meter and, as <name>_plant, on the cooling plant's sub-meter.

    A plant's load may start near zero in the window (a tank just discharged): there additive by default.
    """
    found: dict[str, SettlementRule] = {}
    for name, fields in PRESET_FIELDS.items():
        guard = "tank_or_plant" if fields.get("adjustment", "none") != "none" else "off"
        building = SettlementRule.model_validate({"name": name, "pre_charge_guard": guard, **fields})
        changes = {
            "name": f"{name}_plant",
            "stream": "plant",
            "adjustment": "none" if building.adjustment == "none" else "additive",
            "source": building.source + "; on the cooling plant's sub-meter, additive by default",
        }
        found |= {name: building, f"{name}_plant": building.model_copy(update=changes)}
    return found


PRESETS: Final[Mapping[str, SettlementRule]] = MappingProxyType(_presets())


def _problem(name: str, field: str, came: str, expected: str, advice: str) -> Problem:
    column = f"rules.{name}.{field}".rstrip(".")
    return Problem("fleet.toml", None, column, came, expected, advice)


def _own_rule(name: str, fields: Mapping[str, object]) -> SettlementRule:
    """A rule of the user's own; `based_on` names the preset whose fields it starts from."""
    values = dict(fields)
    base = values.pop("based_on", None)
    start: dict[str, object] = {}
    if base is not None:
        if base not in PRESETS:
            near = get_close_matches(str(base), PRESETS, n=3, cutoff=0.4) or list(PRESETS)
            advice = f"nearest: {', '.join(near)}"
            raise Refused([_problem(name, "based_on", repr(base), "the name of a preset", advice)])
        start = PRESETS[str(base)].model_dump(exclude={"source"})
    try:
        return SettlementRule.model_validate({**start, **values, "name": name})
    except ValidationError as error:
        raise Refused([_fault(name, dict(fault)) for fault in error.errors()]) from None


def _fault(name: str, fault: dict[str, object]) -> Problem:
    place = fault["loc"]
    field = ".".join(str(part) for part in place) if isinstance(place, tuple) else ""
    if fault["type"] == "extra_forbidden":
        near = get_close_matches(field, SettlementRule.model_fields, n=3, cutoff=0.5)
        advice = f"nearest: {', '.join(near)}" if near else "take the line out"
        return _problem(name, field, "an unknown field", "a field of a settlement rule", advice)
    came = repr(fault["input"]) if field else "fields that do not fit together"
    expected = str(fault["msg"]).removeprefix("Value error, ")
    return _problem(name, field, came, expected, "correct it in fleet.toml")


def rule(name: str, user_rules: Mapping[str, Mapping[str, object]] | None = None) -> SettlementRule:
    """The rule of that name among the presets and the user's own (`[rules.<name>]` of fleet.toml).

    Raises Refused for an unknown name (with the nearest ones), a user's rule under a preset's name, and every
    field that does not fit.
    """
    own = user_rules or {}
    shadowing = [other for other in own if other in PRESETS]
    if shadowing:
        advice = 'choose another name; based_on = "<preset>" starts from it'
        raise Refused([_problem(n, "", "a preset's name", "a name of its own", advice) for n in shadowing])
    if name in PRESETS:
        return PRESETS[name]
    if name in own:
        return _own_rule(name, own[name])
    known = [*PRESETS, *own]
    near = get_close_matches(name, known, n=3, cutoff=0.4) or known
    place, expected = "fleet.toml or sites", "the name of a settlement rule"
    advice = f"nearest: {', '.join(near)}"
    raise Refused([Problem(place, None, "settlement_rule", repr(name), expected, advice)])
