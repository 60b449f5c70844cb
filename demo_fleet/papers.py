"""The small tables of a fleet folder: tariffs, bills, holidays, days the plant ran otherwise, unit status.

Owns their invented contents; times come from calendar.py, inventories and peaks from the finer model.
"""

from typing import Any, Final

import numpy as np
import pandas as pd

from demo_fleet import calendar
from demo_fleet.calendar import Local
from demo_fleet.files import utc
from demo_fleet.hidden import Made
from sites.units import Floats, Times

TARIFFS: Final = {
    "general": {"night": 0.085, "day": 0.145, "evening": 0.235, "sun": 0.145},
    "large": {"night": 0.070, "day": 0.125, "evening": 0.210, "sun": 0.125},
    "solar": {"night": 0.120, "day": 0.130, "evening": 0.245, "sun": 0.040},
}
"""Price per kWh: night 22 to 7, evening 16 to 21, sun 10 to 16, day the rest."""


def tariffs(times: Times, local: Local, sun_price_per_kwh: float | None = None) -> pd.DataFrame:
    """Hourly tariffs table; `sun_price_per_kwh` stands for every tariff's sun price on the event's day."""
    whole = local.hour == np.floor(local.hour)
    hour = local.hour[whole]
    band = np.select(
        [(hour >= 22) | (hour < 7), (hour >= 16) & (hour < 21), (hour >= 10) & (hour < 16)],
        ["night", "evening", "sun"],
        default="day",
    )
    today = local.day[whole] == np.datetime64(calendar.EVENT_DAY, "D").astype(np.int64)
    given = np.where(
        today & (band == "sun") & (sun_price_per_kwh is not None), sun_price_per_kwh or 0.0, np.nan
    )
    frames = [
        pd.DataFrame(
            {
                "tariff_id": tariff,
                "interval_start": utc(times[whole]),
                "price_per_kwh": np.where(
                    np.isnan(given), pd.Series(band).map(prices).to_numpy(dtype=np.float64), given
                ),
            }
        )
        for tariff, prices in TARIFFS.items()
    ]
    return pd.concat(frames, ignore_index=True)


def bills(site_ids: "pd.Series[Any]", peak_kw: Floats) -> pd.DataFrame:
    """Peak of the running billing cycle."""
    return pd.DataFrame(
        {
            "site_id": site_ids.to_numpy(),
            "cycle_start": calendar.CYCLE_START,
            "cycle_end": calendar.CYCLE_END,
            "billed_peak_kw": np.round(peak_kw, 1),
        }
    )


def holidays() -> pd.DataFrame:
    """Holidays of the invented place."""
    rows = [(date, name, "calendar of Oramene") for date, name in calendar.HOLIDAYS]
    return pd.DataFrame(rows, columns=["date", "name", "source"])


def plant_days(tank_out_site: str, machine_out_site: str) -> pd.DataFrame:
    """One site's tank was out for a week; another has had a machine out since yesterday."""
    rows = [
        (tank_out_site, calendar.next_day(calendar.TANK_OUT_FROM, i), "tank_out")
        for i in range(calendar.TANK_OUT_DAYS)
    ]
    rows += [(machine_out_site, calendar.next_day(calendar.EVENT_DAY, -i), "chiller_out") for i in (1, 0)]
    return pd.DataFrame(rows, columns=["site_id", "day", "mode"])


def status(
    made: Made,
    inventory_kwh_th: Floats,
    times: Times,
    called: int,
    machine_out: int,
    rng: np.random.Generator,
) -> pd.DataFrame:
    """Newest word from the plants: tank levels by gauges of differing age and class, machines in service.

    inventory_kwh_th (N, T) is the true sum over a site's tanks at interval ends; `called` indexes `times`;
    the last machine of site `machine_out` (-1: none) is out of service.
    """
    plant, site_ids = made.plant, made.sites["site_id"].to_numpy()
    row, machine = np.nonzero(plant.capacity_kw_th > 0.0)
    last = np.concatenate([np.diff(row) > 0, [True]]) & (row == machine_out)
    tanks = _tank_status(made, inventory_kwh_th, times, called, rng)
    machines = pd.DataFrame(
        {
            "site_id": site_ids[row],
            "unit_id": made.chiller_id[row, machine],
            "time": utc(times[called - rng.choice([2, 4, 20, 36], len(row))]),
            "available": ~last,
            "quality": "reported",
        }
    )
    return pd.concat([tanks, machines], ignore_index=True)


def _tank_status(
    made: Made, inventory_kwh_th: Floats, times: Times, called: int, rng: np.random.Generator
) -> pd.DataFrame:
    plant = made.plant
    row, tank = np.nonzero(plant.tank_kwh_th > 0.0)
    age = rng.choice([1, 1, 2, 3, 4, 8, 12], len(row)).astype(np.int64)
    kind = rng.choice(["measured", "reported", "estimated"], len(row), p=[0.5, 0.35, 0.15])
    capacity = plant.tank_kwh_th[row, tank]
    share = capacity / plant.tank_kwh_th.sum(axis=1)[row]
    blur = (
        pd.Series(kind)
        .map({"measured": 0.01, "reported": 0.02, "estimated": 0.04})
        .to_numpy(dtype=np.float64)
    )
    true = inventory_kwh_th[row, called - age - 1] * share
    # A capacity in whole ton-hours may be up to 1.8 kWh_th less than the tank's: no gauge reads above it.
    top = np.floor(capacity - 2.0)
    read = np.clip(true + rng.standard_normal(len(true)) * blur * capacity, 0.0, top)
    gauged = kind == "measured"
    return pd.DataFrame(
        {
            "site_id": made.sites["site_id"].to_numpy()[row],
            "unit_id": made.tank_id[row, tank],
            "time": utc(times[called - age]),
            "inventory_kwh_th": np.round(read, 0),
            "inventory_low_kwh_th": np.where(
                gauged, np.round(np.maximum(read - 0.03 * capacity, 0.0)), np.nan
            ),
            "inventory_high_kwh_th": np.where(
                gauged, np.round(np.minimum(read + 0.03 * capacity, top)), np.nan
            ),
            "available": True,
            "quality": kind,
        }
    )


def fleet_toml(scene: calendar.Scene = calendar.EVENING) -> str:
    """fleet.toml of the invented fleet."""
    return f'''# An invented fleet in an invented district; no line of it is about a real place.
name = "Oramene cool storage fleet"
timezone = "{calendar.ZONE}"
currency = "EUR"
interval_minutes = {calendar.STEP_MINUTES}
notice_minutes = 120
minimum_window_minutes = 60
capacity_payment_per_kwh = 0.30
energy_payment_per_kwh = 0.12
penalty_per_kwh = 0.20
shortfall_price_per_kwh = 3.0
settlement_rule = "{scene.settlement_rule}"
'''
