"""What property tests draw from: small fleets, damages to their tables, frames of any table, hostile text."""

from datetime import date
from decimal import Decimal
from typing import Any

import numpy as np
import pandas as pd
from fleet_folders import small_tables
from hypothesis import strategies as st

from fleet.schema import Column, Table

MONEY = 10**13
CONTROLS = "\x00\x07\x08\x1b\x7f\x9b\x9d\u200e\u202e\u2066\ufeff\r\n\t"
HOSTILE = (
    "\x1b[31mred\x1b[0m", "\x1b]0;title\x07", "\x9b2J", "a\rb", "a\nb", "\u202egnp.exe", "=1+1", "+1", "-1", "@x",
    "=HYPERLINK(\"http://example.invalid\")", "{{ 7*7 }}", "{% for x in y %}", "%s%n", "../../etc", "', --", '"quoted"',
    "<b>bold</b>", "line one; contact=\x1b[2Jnobody", "\x08\x08\x08hidden", "🧊 ice", "é" * 30,
)  # fmt: skip
"""Texts that would steer a terminal, a spreadsheet, a template or a path if they were let through."""

texts = st.text(st.characters(exclude_categories=("Cs",)), min_size=1, max_size=12)
hostile = st.one_of(st.sampled_from(HOSTILE), st.text(CONTROLS + "ab=+-@;{}%\\/'\"", min_size=1, max_size=20))
finite = st.floats(allow_nan=False, allow_infinity=False, width=64)
moments = st.datetimes(pd.Timestamp("1970-01-01"), pd.Timestamp("2199-12-31")).map(
    lambda time: pd.Timestamp(time).as_unit("us").tz_localize("UTC")
)
days = st.dates(date(1970, 1, 1), date(2199, 12, 31)).map(pd.Timestamp)
_VALUES: dict[str, st.SearchStrategy[Any]] = {
    "text": texts,
    "number": finite,
    "whole": st.integers(-(2**53), 2**53),
    "flag": st.booleans(),
    "time": moments,
    "day": days,
    "decimal": st.integers(-MONEY, MONEY).map(lambda cents: Decimal(cents).scaleb(-2)),
    "list_text": st.lists(texts, max_size=3),
    "list_number": st.lists(finite, max_size=3),
}


def values(column: Column) -> st.SearchStrategy[Any]:
    """Values that a column's type can hold, none of them where the column may be empty."""
    some = st.sampled_from(column.choices) if column.choices else _VALUES[column.type]
    return some if column.required == "yes" else st.one_of(st.none(), some)


@st.composite
def frames(draw: st.DrawFn, table: Table) -> pd.DataFrame:
    """A frame of a few rows that fits the table's columns."""
    count = draw(st.integers(0, 4))
    return pd.DataFrame(
        {
            column.name: pd.Series([draw(values(column)) for _ in range(count)], dtype=object)
            for column in table.columns
        }
    )


@st.composite
def small_fleets(draw: st.DrawFn) -> dict[str, pd.DataFrame]:
    """Tables of the small fleet by the hour with other sizes, strategies, levels, limits and prices."""
    tables = small_tables()
    for name, frame in tables.items():
        if "interval_start" in frame:
            tables[name] = frame[frame["interval_start"].str.endswith(":00Z")].reset_index(drop=True)
    sites, chillers, tanks = tables["sites"], tables["chillers"], tables["tanks"]
    several = st.lists(st.floats(0.6, 1.6), min_size=5, max_size=5)
    chillers["capacity_kw_th"] *= np.round(draw(several), 2)
    chillers["min_off_minutes"] = draw(st.sampled_from((10.0, 60.0, 120.0)))
    tanks["capacity_kwh_th"] = np.round(tanks["capacity_kwh_th"] * np.array(draw(several)[:3]), 0)
    strategies = ("full_storage", "load_levelling", "chiller_priority", "storage_priority")
    sites["strategy"] = [draw(st.sampled_from(strategies)) for _ in range(3)]
    sites["no_unmet"] = [draw(st.booleans()) for _ in range(3)]
    sites["rise_limit_k"] = draw(st.sampled_from((0.0, 0.5, 2.0)))
    sites["layout"] = [draw(st.sampled_from(("parallel", "series"))) for _ in range(3)]
    sites["held_back_kwh_th"] = np.round(draw(st.floats(0.0, 0.5)) * tanks["capacity_kwh_th"], 0)
    low = np.round(draw(st.floats(0.3, 1.0)) * tanks["capacity_kwh_th"], 0)
    tables["status"] = pd.DataFrame(
        {
            "site_id": tanks["site_id"],
            "unit_id": tanks["tank_id"],
            "time": "2026-07-14T12:00+03:00",
            "inventory_kwh_th": low,
            "available": "",
            "quality": "measured",
        }
    )
    limits = (None, 1600.0, 2500.0)
    tables["nodes"]["import_limit_kw"] = [draw(st.sampled_from(limits)) for _ in range(3)]
    tables["tariffs"]["price_per_kwh"] *= draw(st.sampled_from((0.5, 1.0, 4.0)))
    return tables
