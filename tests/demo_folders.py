"""Invented fleets for tests, made once a session, and event records laid on them by hand."""

from functools import cache
from pathlib import Path
from tempfile import mkdtemp

import numpy as np
import pandas as pd

from demo_fleet import calendar
from demo_fleet.sample import SampleFacts, sample


@cache
def short_fleet(sites: int, seed: int = 1) -> SampleFacts:
    """A fleet with twelve days of history; do not write to it."""
    return sample(Path(mkdtemp()) / f"fleet-{sites}-{seed}", sites=sites, seed=seed, history_days=12)


def moment(hour: float, day: str = calendar.EVENT_DAY) -> pd.Timestamp:
    return pd.Timestamp(calendar.moment(day, hour)).tz_localize("UTC")


def record(folder: Path, out: Path, site_ids: list[str], keep_one: bool = True) -> Path:
    """Steps and windows that stop machines at 16:00 and bring them back from 19:00, five minutes apart."""
    chillers = pd.read_csv(folder / "chillers.csv")
    tanks = pd.read_csv(folder / "tanks.csv")
    rows: list[tuple[str, str, pd.Timestamp, str, float]] = []
    for site in site_ids:
        units = chillers.loc[chillers["site_id"] == site, "chiller_id"].to_list()
        off = units[:-1] if keep_one and len(units) > 1 else units
        for order, unit in enumerate(units):
            if unit in off:
                rows.append((site, unit, moment(16), "off", np.nan))
                rows.append((site, unit, moment(19 + order / 12), "restart", np.nan))
            else:
                rows.append((site, unit, moment(16), "demand_limit", 0.6))
                rows.append((site, unit, moment(19), "demand_limit_removed", np.nan))
        for unit in tanks.loc[tanks["site_id"] == site, "tank_id"]:
            rows.append((site, unit, moment(22.5), "recharge_may_start", np.nan))
    steps = pd.DataFrame(rows, columns=["site_id", "unit_id", "at", "action", "value"])
    out.mkdir(parents=True)
    steps.assign(event_id="trial", detail="").to_parquet(out / "steps.parquet")
    windows = pd.DataFrame({"site_id": site_ids, "window_start": moment(16), "window_end": moment(19)})
    windows.to_parquet(out / "windows.parquet")
    return out
