"""What a new fleet folder starts with: a commented fleet.toml, and every table with its heading and an example row.

Owns these texts, and how an example row is told from a real one. Nothing is written here.
"""

import csv
import io
import json
from collections.abc import Mapping
from typing import Final

import pandas as pd

from fleet.errors import Problem
from fleet.schema import tables
from fleet.settings import FILE, Settings

MARK: Final = "EXAMPLE"
"""Ids and names of example rows start with this; nothing is quoted while one is left."""

_EXAMPLES: Final = {
    "site_id": f"{MARK}-SITE",
    "node_id": f"{MARK}-NODE",
    "tariff_id": f"{MARK}-TARIFF",
    "station_id": f"{MARK}-STATION",
    "chiller_id": f"{MARK}-CHILLER",
    "tank_id": f"{MARK}-TANK",
    "unit_id": f"{MARK}-TANK",
    "meter_id": f"{MARK}-METER",
    "name": MARK,
    "building_type": "office",
    "floor_area_m2": "9000",
    "peak_cooling_kw_th": "900",
    "capacity_kw_th": "500",
    "capacity_kwh_th": "3000",
    "interval_start": "2026-07-15T14:00+00:00",
    "time": "2026-07-15T13:30+00:00",
    "dry_bulb_c": "33.5",
    "rh_pct": "45",
    "cooling_load_kw_th": "700",
    "rest_kw": "180",
    "other_kw": "1200",
    "price_per_kwh": "0.18",
    "cycle_start": "2026-07-01",
    "cycle_end": "2026-07-31",
    "billed_peak_kw": "420",
    "inventory_kwh_th": "2800",
    "date": "2026-08-15",
    "day": "2026-07-01",
    "mode": "usual",
    "kw": "350",
}
_KIND: Final = {"chillers": "air_cooled_screw", "tanks": "ice_internal_melt"}
_MARKED: Final = ("site_id", "node_id", "station_id", "tariff_id", "meter_id", "name")
_SETTINGS_WORDS: Final[tuple[tuple[str, str, str], ...]] = (
    ("name", "The fleet's name, as orders and statements print it.", f'"{MARK} fleet"'),
    (
        "timezone",
        "IANA name of the local time of all sites, such as Europe/Athens or America/Chicago.",
        '"UTC"',
    ),
    ("currency", "Three capital letters (ISO 4217), such as EUR or USD.", '"XXX"'),
    ("interval_minutes", "Length of an interval: 5, 10, 15, 30 or 60.", "15"),
    ("energy_price_per_kwh", "One energy price at all times; needed only without a tariffs table.", "0.18"),
    ("country", "Two-letter code, for public holidays without a holidays table.", '"GR"'),
    ("subdivision", "Part of that country, where its holidays differ.", '"..."'),
    ("notice_minutes", "Least time between a call and the start of a site's window.", "120"),
    ("minimum_window_minutes", "Shortest window of a site.", "60"),
    ("shortfall_price_per_kwh", "Price of a kWh not delivered; default ten times the dearest price.", "1.8"),
    ("over_delivery_price_per_kwh", "Price of a kWh delivered beyond the tolerance.", "0.18"),
    ("over_delivery_fraction", "That tolerance, as a share of the request.", "0.05"),
    ("capacity_payment_per_kwh", "Paid to a site per committed kWh, scaled by its performance.", "0"),
    ("energy_payment_per_kwh", "Paid to a site per delivered kWh.", "0"),
    ("penalty_per_kwh", "Taken from a site per kWh below its commitment.", "0"),
    ("performance_floor", "Performance below this share is paid as none.", "0"),
    ("performance_cap", "Performance is paid up to this share.", "1"),
    ("settlement_rule", "How baselines are made; rules of your own go under [rules.<name>].", '"ten_of_ten"'),
    ("rounding", "How money is rounded to cents.", '"half_up"'),
    ("season", "The span that call limits per season count over.", '"calendar year"'),
)
_NEEDED: Final = ("sites", "chillers", "tanks", "weather")
"""Tables a fleet needs; the others may be deleted."""


def settings_text(given: Mapping[str, str | float], local_tables: tuple[str, ...] = ()) -> str:
    """A commented fleet.toml with the settings of `given`, the rest commented out at an example or the default.

    `local_tables` are declared to be in local wall time. Without name, timezone or currency it keeps the examples.
    """
    lines = [
        "# Settings of this fleet. A line that starts with # is not read; take the # away to give that setting.",
        f"# Replace what says {MARK}; `shedwright check` lists what is still missing.",
        "# `shedwright columns` prints every column of every table: meaning, unit, range, where to find it.",
    ]
    for name, words, example in _SETTINGS_WORDS:
        lines += ["", f"# {words}"]
        if name in given:
            lines.append(f"{name} = {_toml(given[name])}")
        else:
            needed = Settings.model_fields[name].is_required()
            lines.append(f"{name} = {example}" if needed else f"# {name} = {example}")
    lines += [
        "",
        "# How the times of each table are written: offset (each with its own, the default), local (wall time),",
        "# standard (local time without summer time) or utc.",
        "[tables]",
    ]
    timed = [name for name, table in tables("fleet").items() if table.of_type("time")]
    lines += [f'{"" if name in local_tables else "# "}{name}_time = "local"' for name in timed]
    return "\n".join(lines) + "\n"


def _toml(value: str | float) -> str:
    if isinstance(value, str):
        # A JSON text is a TOML text, but for one sign.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    return f"{value:.15g}"


def example_files() -> dict[str, str]:
    """Text of every file of a new folder by name: fleet.toml and the tables, each with one example row."""
    files = {FILE: settings_text({})}
    for name, table in tables("fleet").items():
        row = [_example(name, column) for column in table.names]
        files[f"{name}.csv"] = table_text([(1, table.names), (2, tuple(row))])
    return files


def _example(table_name: str, column: str) -> str:
    """The example of a column; "" for what has a default, is worked out, or is the other of two sizes."""
    if column == "kind":
        return _KIND[table_name]
    optional = table_name in ("sites", "nodes") and column in ("node_id", "tariff_id", "station_id")
    if optional and table_name == "sites":
        return ""
    if column in ("inventory_low_kwh_th", "inventory_high_kwh_th"):
        return ""
    return _EXAMPLES.get(column, "")


def table_text(rows: list[tuple[int, tuple[str, ...]]]) -> str:
    """CSV of rows with the line each shall stand on, rising; lines between are blank. No cell holds a line break."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    line = 1
    for number, cells in rows:
        out.write("\n" * (number - line))
        writer.writerow(cells)
        line = number + 1
    return out.getvalue()


def without_examples(frame: pd.DataFrame, file: str, name: str) -> tuple[pd.DataFrame, list[Problem]]:
    """A table without its example rows, and a Problem for each row that was one."""
    marked = pd.Series(False, index=frame.index)
    for column in (column for column in _MARKED if column in frame.columns):
        texts = [text for text in frame[column].dropna().unique() if str(text).startswith(MARK)]
        if texts:
            marked |= frame[column].isin(texts)
    if not marked.any():
        return frame, []
    own = "replace it by your own rows"
    advice = own if name in _NEEDED else f"{own}, or delete the file: this table is optional"
    came = "the example row"
    problems = [
        Problem(file, int(row), None, came, "rows of your fleet", advice) for row in frame.index[marked]
    ]
    return frame[~marked], problems


def example_settings(settings: Settings) -> list[Problem]:
    """A Problem where the settings are still the example's."""
    if not settings.name.startswith(MARK):
        return []
    advice = "write your fleet's name, timezone and currency"
    return [Problem(FILE, None, "name", repr(settings.name), "the settings of your fleet", advice)]
