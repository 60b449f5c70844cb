"""Settings of a fleet: what `fleet.toml` may say, what is taken where it is silent.

Owns names, defaults and limits of the settings. Reading the file is folder.py's; settlement rules of one's own
([rules.<name>]) are passed through as they stand to rules.py.
"""

import re
import tomllib
from dataclasses import dataclass
from difflib import get_close_matches
from functools import cache
from typing import Annotated, Any, Final, Literal
from zoneinfo import available_timezones

import holidays
import pandas as pd
from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator, model_validator

from fleet.errors import Problem, Refused
from fleet.schema import tables

FILE: Final = "fleet.toml"
TimeReading = Literal["utc", "offset", "local", "standard"]
"""How the times of a table are written: in UTC, with an offset each, in local wall time, in standard time."""
NotNegative = Annotated[float, Field(ge=0.0, allow_inf_nan=False)]


class Settings(BaseModel):
    """Settings of a fleet, checked; money in `currency`, prices per kWh of electricity."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=False)

    name: Annotated[str, Field(min_length=1, max_length=200)]
    timezone: str
    """IANA name; local wall time of the whole fleet."""
    currency: Annotated[str, Field(pattern=r"^[A-Z]{3}$")]
    interval_minutes: Literal[5, 10, 15, 30, 60] = 15
    notice_minutes: Annotated[float, Field(ge=0.0, le=10080.0)] = 120.0
    minimum_window_minutes: Annotated[float, Field(ge=0.0, le=1440.0)] = 60.0
    energy_price_per_kwh: Annotated[float, Field(ge=-10.0, le=100.0, allow_inf_nan=False)] | None = None
    """One price at all times for every site, where the fleet has no tariffs table."""
    shortfall_price_per_kwh: NotNegative | None = None
    """None: ten times the dearest energy price of the horizon."""
    over_delivery_price_per_kwh: NotNegative | None = None
    """None: the dearest energy price of the horizon, so that avoided energy never pays for giving too much."""
    over_delivery_fraction: Annotated[float, Field(ge=0.0, le=1.0)] = 0.05
    capacity_payment_per_kwh: NotNegative = 0.0
    """Per committed kWh, scaled by performance."""
    energy_payment_per_kwh: NotNegative = 0.0
    """Per delivered kWh."""
    penalty_per_kwh: NotNegative = 0.0
    """Per kWh below the commitment."""
    performance_floor: Annotated[float, Field(ge=0.0, le=1.0)] = 0.0
    performance_cap: Annotated[float, Field(ge=0.0, le=2.0)] = 1.0
    settlement_rule: Annotated[str, Field(min_length=1)] = "ten_of_ten"
    rounding: Literal["half_up"] = "half_up"
    country: str | None = None
    """ISO 3166 code: public holidays where the fleet has no holidays table."""
    subdivision: str | None = None
    season: Literal["calendar year"] = "calendar year"
    tables: dict[str, TimeReading] = Field(default_factory=dict)
    """`<table>_time`: how its times are written."""
    rules: dict[str, dict[str, Any]] = Field(default_factory=dict)

    @field_validator("timezone")
    @classmethod
    def _known_zone(cls, value: str) -> str:
        zones = _zones()
        if value not in zones:
            raise ValueError(f"an IANA time zone such as Europe/Athens; {_nearest(value, sorted(zones))}")
        return value

    @field_validator("tables")
    @classmethod
    def _known_tables(cls, value: dict[str, str]) -> dict[str, str]:
        known = [f"{name}_time" for name in _tables_with_times()]
        for name in value:
            if name not in known:
                raise ValueError(f"a name of {', '.join(known)}; {_nearest(name, known)}")
        return value

    @model_validator(mode="after")
    def _consistent(self) -> "Settings":
        if self.performance_floor > self.performance_cap:
            raise ValueError("performance_floor at most performance_cap; lower the floor or raise the cap")
        _check_offset(self.timezone, self.interval_minutes)
        _check_country(self.country, self.subdivision)
        return self

    def time_reading(self, table: str) -> TimeReading:
        """How the times of an input table are written; "offset" where nothing is declared."""
        return self.tables.get(f"{table}_time", "offset")


@dataclass(frozen=True)
class DefaultUsed:
    """A setting the fleet did not give, and what is taken in its place."""

    name: str
    value: str


def parse_settings(text: str, file: str = FILE) -> Settings:
    """Settings from the text of a fleet.toml; Refused with one Problem for each thing wrong in it."""
    try:
        given = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        line = re.search(r"line (\d+)", str(error))
        row = int(line.group(1)) if line else len(text.splitlines())
        what = re.sub(r" \(at .*\)$", "", str(error))
        raise Refused([Problem(file, row, None, what, "a TOML file", "mend that line")]) from error
    try:
        return Settings.model_validate(given)
    except ValidationError as error:
        raise Refused([_problem(dict(one), file) for one in error.errors()]) from error


def defaults_used(settings: Settings) -> list[DefaultUsed]:
    """Every setting that was not given, with the value taken, in the order of `Settings`."""
    used = []
    for name in type(settings).model_fields:
        if name in settings.model_fields_set or name in ("tables", "rules"):
            continue
        value = getattr(settings, name)
        used.append(DefaultUsed(name, _UNSAID.get(name, "none") if value is None else f"{value}"))
    undeclared = [t for t in _tables_with_times() if f"{t}_time" not in settings.tables]
    return used + [DefaultUsed(f"tables.{t}_time", settings.time_reading(t)) for t in undeclared]


_UNSAID: Final = {
    "energy_price_per_kwh": "none, the tariffs table says it",
    "shortfall_price_per_kwh": "10 x the dearest energy price of the horizon",
    "over_delivery_price_per_kwh": "the dearest energy price of the horizon",
}
_EXPECTED: Final = {
    "currency": "three capital letters (ISO 4217)",
    "interval_minutes": "5, 10, 15, 30 or 60",
}


@cache
def _zones() -> set[str]:
    """Every IANA name; gathering them reads the whole zone data, some hundreds of files."""
    return available_timezones()


def _tables_with_times() -> list[str]:
    return [name for name, table in tables("fleet").items() if table.of_type("time")]


def _problem(error: dict[str, Any], file: str) -> Problem:
    """One message of the model as a Problem: where, what came, what was expected, what to do."""
    place = ".".join(str(part) for part in error["loc"])
    if error["type"] == "missing":
        return Problem(file, None, place, "nothing", "a value", f"add {place} = ... to {file}")
    if error["type"] == "extra_forbidden":
        known = list(Settings.model_fields)
        expected = "a setting that is known"
        return Problem(file, None, place, repr(error["input"]), expected, _nearest(place, known))
    came = repr(error["input"]) if error["loc"] else "values that do not go together"
    expected, _, advice = error["msg"].removeprefix("Value error, ").partition("; ")
    expected = expected.removeprefix("Input should be ")
    expected = f"a number {expected}" if expected.startswith(("greater", "less")) else expected
    expected = _EXPECTED.get(place, expected)
    return Problem(file, None, place or None, came, expected, advice or "give such a value")


def _nearest(name: str, known: list[str]) -> str:
    near = get_close_matches(name, known, n=1, cutoff=0.6)
    return f"did you mean {near[0]}?" if near else "remove it or look at the list of names"


def _check_offset(timezone: str, interval_minutes: int) -> None:
    """The grid counts from the full hour of UTC: local full hours must lie on it."""
    winter_and_summer = pd.DatetimeIndex(["2026-01-01", "2026-07-01"], tz="UTC").tz_convert(timezone)
    for stamp in winter_and_summer:
        offset = stamp.utcoffset()
        minutes = offset.total_seconds() / 60.0 if offset is not None else 0.0
        if minutes % interval_minutes:
            raise ValueError(
                f"interval_minutes that divide the offset of {timezone} ({minutes:+.0f} minutes); "
                "use 15 or 30 minutes"
            )


def _check_country(country: str | None, subdivision: str | None) -> None:
    if country is None:
        if subdivision is not None:
            raise ValueError("country together with subdivision; add country, or remove subdivision")
        return
    supported = holidays.list_supported_countries(include_aliases=True)
    if country not in supported:
        raise ValueError("country as a two-letter ISO 3166 code with known holidays; give a holidays table")
    if subdivision is not None and subdivision not in supported[country]:
        raise ValueError(f"subdivision of {country}, one of {', '.join(supported[country])}; choose one")
