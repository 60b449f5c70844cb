"""One energy price for every site and all times, where the fleet has no tariffs table.

Owns nothing but this stand-in table; the price is a setting, the times are the weather table's.
"""

from collections.abc import Mapping
from typing import Final

import pandas as pd

from fleet.schema import table
from fleet.settings import FILE, Settings
from fleet.tables import stable

ONE_TARIFF: Final = "one price"


def one_price(
    settings: Settings, frames: Mapping[str, pd.DataFrame], has_table: bool
) -> tuple[pd.DataFrame, list[str]]:
    """The tariffs table to use, and notes on it: the fleet's own, or the one price at each time of the weather.

    `frames` by table name, among them `tariffs` (without rows where there is no such table) and `weather`.
    """
    given, price = frames["tariffs"], settings.energy_price_per_kwh
    if price is None:
        return given, []
    if has_table:
        return given, [f"{FILE}: energy_price_per_kwh is not used, for there is a tariffs table"]
    times = frames["weather"]["interval_start"].dropna().drop_duplicates().sort_values()
    rows = pd.DataFrame({"tariff_id": ONE_TARIFF, "interval_start": times, "price_per_kwh": price})
    note = f"tariffs: {price:g} {settings.currency}/kWh for every site at all times, from {FILE}"
    return stable(rows.reset_index(drop=True), table("fleet", "tariffs")), [note]
