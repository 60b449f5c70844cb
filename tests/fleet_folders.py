"""A small invented fleet as a folder, for tests: three buildings, three days at a quarter of an hour."""

from pathlib import Path

import numpy as np
import pandas as pd

from fleet.folder import problems

SETTINGS = """name = "Amber Coast Power"
timezone = "Europe/Athens"
currency = "EUR"
"""
FIRST = pd.Timestamp("2026-07-13T21:00", tz="UTC")  # local midnight of 14 July 2026
DAYS = 3
STARTS = FIRST + pd.Timedelta(minutes=15) * np.arange(DAYS * 96)
TEXTS = [start.strftime("%Y-%m-%dT%H:%MZ") for start in STARTS]


def small_tables() -> dict[str, pd.DataFrame]:
    """Tables by name, as text and numbers just as they go to CSV."""
    hour = (np.arange(DAYS * 96) % 96) / 4.0
    dry_bulb_c = 27.0 + 7.0 * np.sin((hour - 9.0) / 24.0 * 2.0 * np.pi)
    load = np.clip(0.25 + 0.75 * np.sin((hour - 6.0) / 14.0 * np.pi), 0.1, 1.0)
    return {
        "sites": pd.DataFrame(
            {
                "site_id": ["harbour", "library", "ward"],
                "node_id": ["north", "north", "south"],
                "building_type": ["office", "courthouse", "hospital"],
                "floor_area_m2": [9000.0, 6000.0, None],
                "peak_cooling_kw_th": [900.0, None, 1500.0],
                "strategy": ["chiller_priority", "storage_priority", "load_levelling"],
                "critical_kw_th": [None, None, 400.0],
                "demand_price_per_kw": [8.0, 8.0, None],
                "call_fee": [25.0, 25.0, 40.0],
            }
        ),
        "chillers": pd.DataFrame(
            {
                "site_id": ["harbour", "harbour", "library", "ward", "ward"],
                "chiller_id": ["CH-1", "CH-2", "CH-1", "CH-1", "CH-2"],
                "kind": ["air_cooled_screw"] * 3 + ["water_cooled_centrifugal"] * 2,
                "capacity_kw_th": [500.0, 500.0, None, 800.0, 900.0],
                "capacity_ton": [None, None, 150.0, None, None],
                "loading_order": [2, 1, None, None, None],
            }
        ),
        "tanks": pd.DataFrame(
            {
                "site_id": ["harbour", "library", "ward"],
                "tank_id": ["ICE-1", "ICE-1", "CW-1"],
                "kind": ["ice_internal_melt", "ice_external_melt", "chilled_water"],
                "capacity_kwh_th": [3000.0, 2500.0, 5000.0],
            }
        ),
        "nodes": pd.DataFrame(
            {
                "node_id": ["coast", "north", "south"],
                "parent_id": ["", "coast", "coast"],
                "import_limit_kw": [None, 2500.0, None],
            }
        ),
        "node_loads": pd.DataFrame(
            {"node_id": "north", "interval_start": TEXTS, "other_kw": np.round(900.0 + 500.0 * load, 1)}
        ),
        "weather": pd.DataFrame(
            {
                "station_id": "pier",
                "interval_start": TEXTS,
                "dry_bulb_c": np.round(dry_bulb_c, 2),
                "rh_pct": 45.0,
            }
        ),
        "loads": pd.concat(
            [
                pd.DataFrame(
                    {
                        "site_id": site,
                        "interval_start": TEXTS,
                        "cooling_load_kw_th": np.round(peak * load, 1),
                        "rest_kw": np.round(0.2 * peak * (0.5 + load), 1),
                    }
                )
                for site, peak in (("harbour", 850.0), ("ward", 1400.0))
            ],
            ignore_index=True,
        ),
        "tariffs": pd.DataFrame(
            {
                "tariff_id": "day-night",
                "interval_start": TEXTS[::4],
                "price_per_kwh": np.where((hour[::4] >= 8.0) & (hour[::4] < 22.0), 0.24, 0.11),
            }
        ),
        "bills": pd.DataFrame(
            {
                "site_id": ["harbour", "library"],
                "cycle_start": "2026-07-01",
                "cycle_end": "2026-07-31",
                "billed_peak_kw": [420.0, 260.0],
            }
        ),
        "status": pd.DataFrame(
            {
                "site_id": ["harbour", "harbour", "library", "ward"],
                "unit_id": ["ICE-1", "ICE-1", "ICE-1", "CH-2"],
                "time": ["2026-07-14T06:00+03:00", "2026-07-14T11:00+03:00"] + ["2026-07-14T10:00+03:00"] * 2,
                "inventory_kwh_th": [2950.0, 2800.0, 2400.0, None],
                "available": ["", "", "", "false"],
                "quality": ["measured", "measured", "reported", ""],
            }
        ),
        "holidays": pd.DataFrame(
            {"date": ["2026-08-15"], "name": ["High summer"], "source": ["the town hall"]}
        ),
        "plant_days": pd.DataFrame({"site_id": ["harbour"], "day": ["2026-07-01"], "mode": ["tank_out"]}),
        "meters": pd.concat(
            [
                pd.DataFrame(
                    {"meter_id": site, "interval_start": TEXTS, "kw": np.round(kw * (0.4 + load), 1)}
                )
                for site, kw in (("harbour", 380.0), ("library", 240.0), ("ward", 620.0))
            ],
            ignore_index=True,
        ),
    }


def write_small_fleet(
    path: Path, settings: str = SETTINGS, **changes: pd.DataFrame | dict[str, object] | str | None
) -> Path:
    """Write the fleet to `path`; `changes` by table: a frame, columns to set, the file's text, or None (leave out)."""
    path.mkdir(parents=True, exist_ok=True)
    (path / "fleet.toml").write_text(settings, encoding="utf-8")
    tables = small_tables()
    unknown = set(changes) - set(tables) - {"meter_map"}
    assert not unknown, f"no such table: {unknown}"
    for name in [*tables, "meter_map"]:
        change = changes.get(name, {})
        if change is None or (name == "meter_map" and name not in changes):
            continue
        target = path / f"{name}.csv"
        if isinstance(change, str):
            target.write_text(change, encoding="utf-8")
        elif isinstance(change, pd.DataFrame):
            change.to_csv(target, index=False)
        else:
            tables[name].assign(**change).to_csv(target, index=False)
    return path


def set_cell(name: str, row: int, column: str, value: object) -> pd.DataFrame:
    """The table of that name with one cell changed; `row` is the line of its CSV file (heading = 1)."""
    frame = small_tables()[name]
    frame[column] = frame[column].astype(object) if column in frame else None
    frame.loc[row - 2, column] = value
    return frame


def wrong(path: Path) -> list[str]:
    """Every problem of a folder, each as its whole message."""
    return [str(problem) for problem in problems(path)]
