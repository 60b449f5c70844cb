"""What holds for any small fleet and any table: written is read, rows may stand in any order, limits hold."""

import dataclasses
from pathlib import Path
from tempfile import TemporaryDirectory

import made_settlement as made
import numpy as np
import pandas as pd
import pytest
from commands import run
from fleet_folders import SETTINGS, small_tables, write_small_fleet
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from strategies import frames, small_fleets

from fleet.assemble import assemble
from fleet.audit import audit
from fleet.folder import open_folder
from fleet.rules import PRESETS
from fleet.schema import Table, tables
from fleet.settle import settle
from fleet.tables import read_parquet, stable, write_parquet
from sites.units import KW_TH_PER_TON

EVERY_TABLE = [table for folder in ("fleet", "call", "settlement") for table in tables(folder).values()]
HOURLY = SETTINGS + "interval_minutes = 60\n"
START, END = np.datetime64("2026-07-14T10:00"), np.datetime64("2026-07-15T21:00")
lean = settings(
    deadline=None, max_examples=6, suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large]
)


@pytest.mark.parametrize("table", EVERY_TABLE, ids=lambda table: f"{table.folder}-{table.name}")
def test_what_is_written_is_read(table: Table) -> None:
    @settings(lean, max_examples=5)
    @given(frames(table))
    def back(frame: pd.DataFrame) -> None:
        with TemporaryDirectory() as folder:
            path = Path(folder) / "t.parquet"
            write_parquet(frame, path, table)
            read = read_parquet(path, table)
        pd.testing.assert_frame_equal(read, stable(frame, table))

    back()


def arrays_of(path: Path) -> list[np.ndarray]:
    """Every array that a fleet is made of, sites, machines and tanks in the order of their ids."""
    fleet = assemble(open_folder(path), START, END)
    roster = fleet.roster
    order = np.argsort(roster.buildings.site_id)
    parts = [*dataclasses.astuple(roster.buildings), fleet.outlook.cooling_load_kw_th, fleet.outlook.rest_kw]
    parts += [fleet.outlook.price_per_kwh, fleet.outlook.dry_bulb_c, fleet.outlook.wet_bulb_c]
    by_site = [np.asarray(part)[order] for part in parts]
    for units, ids in ((roster.chillers, roster.chillers.chiller_id), (roster.tanks, roster.tanks.tank_id)):
        within = np.argsort(ids, axis=1, kind="stable")
        named = [getattr(units, field.name) for field in dataclasses.fields(units)]
        by_site += [np.take_along_axis(part, within, axis=1)[order] for part in named]
    return by_site


@lean
@given(st.integers(0, 2**32 - 1))
def test_rows_in_any_order_give_the_same_fleet(seed) -> None:
    ordered = small_tables()
    ordered["chillers"]["loading_order"] = [2, 1, 1, 1, 2]
    rng = np.random.default_rng(seed)
    mixed = {name: frame.iloc[rng.permutation(len(frame))] for name, frame in ordered.items()}
    with TemporaryDirectory() as folder:
        one = arrays_of(write_small_fleet(Path(folder) / "one", **ordered))
        other = arrays_of(write_small_fleet(Path(folder) / "other", **mixed))
    for here, there in zip(one, other, strict=True):
        np.testing.assert_array_equal(here, there)


def test_sizes_in_tons_and_ton_hours_give_the_same_fleet(tmp_path) -> None:
    chillers, tanks = small_tables()["chillers"], small_tables()["tanks"]
    metric = chillers["capacity_kw_th"].fillna(chillers["capacity_ton"] * KW_TH_PER_TON)
    us_chillers = chillers.assign(capacity_kw_th=None, capacity_ton=metric / KW_TH_PER_TON)
    us_tanks = tanks.assign(capacity_ton_h=tanks["capacity_kwh_th"] / KW_TH_PER_TON).drop(
        columns="capacity_kwh_th"
    )
    one = arrays_of(write_small_fleet(tmp_path / "si"))
    other = arrays_of(write_small_fleet(tmp_path / "us", chillers=us_chillers, tanks=us_tanks))
    for here, there in zip(one, other, strict=True):
        if here.dtype == np.float64:
            np.testing.assert_allclose(here, there, rtol=1e-12)
        else:
            np.testing.assert_array_equal(here, there)


def holds(drawn: dict[str, pd.DataFrame], kw: float, hours: int) -> None:
    """A call of the drawn fleet is refused, or its audit finds no limit broken, from the record alone."""
    times = ("--from", "2026-07-14T16:00", "--to", f"2026-07-14T{16 + hours}:00", "--at", "2026-07-14T13:00")
    with TemporaryDirectory() as folder:
        fleet = write_small_fleet(Path(folder) / "fleet", settings=HOURLY, **drawn)
        ran = run("call", fleet, "--kw", round(kw, 1), *times, "--event", "E", "--accept-less")
        assert ran.code in (0, 3), ran
        if ran.code == 0:
            found = audit(fleet, "E")
            assert found.faults == ()
        else:
            assert not (fleet / "events").exists()
            assert ran.err.startswith("the request cannot be met as asked:")


ASKED = (small_fleets(), st.floats(20.0, 200.0), st.sampled_from((1, 2, 3)))


@lean
@given(*ASKED)
def test_no_small_fleet_is_called_beyond_a_limit(drawn, kw, hours) -> None:
    holds(drawn, kw, hours)


@pytest.mark.slow
@settings(lean, max_examples=200)
@given(*ASKED)
def test_two_hundred_small_fleets_are_not_called_beyond_a_limit(drawn, kw, hours) -> None:
    holds(drawn, kw, hours)


EVENT = (made.utc("2025-07-10 15:00"), made.utc("2025-07-10 18:00"))


LIKE_DAYS = [
    name
    for name in PRESETS
    if not name.startswith(("weather", "temperature")) and not name.endswith("_plant")
]
"""Rules that settle a building meter and ask for no weather."""


@pytest.mark.parametrize("name", LIKE_DAYS)
def test_a_meter_that_shows_the_baseline_has_delivered_nothing(name: str) -> None:
    starts = made.times(made.utc("2025-06-01"), made.utc("2025-07-11"), 60)
    event = np.asarray((starts >= EVENT[0]) & (starts < EVENT[1]))
    facts = made.call({"a": PRESETS[name]}, *EVENT, made.utc("2025-07-11"))

    @settings(lean, max_examples=5)
    @given(st.integers(0, 2**32 - 1))
    def nothing(seed: int) -> None:
        kw = np.random.default_rng(seed).uniform(100.0, 500.0, len(starts))
        rows = settle(facts, made.readings("a", starts, kw)).intervals
        kw[event] = rows.loc[rows["in_event"], "adjusted_baseline_kw"].to_numpy()
        again = settle(facts, made.readings("a", starts, kw))
        assert np.abs(again.intervals.loc[again.intervals["in_event"], "delivered_kw"]).max() < 1e-9
        assert again.sites["delivered_kwh"][0] == pytest.approx(0.0, abs=1e-9)

    nothing()
