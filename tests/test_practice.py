"""A whole practice event as the installed command leaves it: the record, read from outside."""

import json

import duckdb
import numpy as np
import pandas as pd
import polars
import pytest
from conftest import Practice, shedwright

from fleet.schema import tables

EVENT = "practice"
EVENT_SPAN = ("--from", "2026-07-15T16:00", "--to", "2026-07-15T19:00", "--at", "2026-07-15T13:00")


def table_of(practice: Practice, name: str, folder: str = "call-001") -> pd.DataFrame:
    return pd.read_parquet(practice.fleet / "events" / EVENT / folder / f"{name}.parquet")


def test_it_asks_expects_delivers_and_holds(practice: Practice) -> None:
    told = practice.told
    assert told["audit"]["holds"] is True
    assert min(told["call"]["expected_kw"]) >= told["call"]["requested_kw"][0] - 1e-6
    assert told["call"]["proof"]["bound"] <= told["call"]["proof"]["objective"]
    assert len(told["call"]["called_sites"]) >= 10
    assert told["settlement"]["delivered_kwh"] == pytest.approx(told["true_kwh"], rel=0.15)


@pytest.mark.parametrize("folder", ["call", "settlement"])
def test_every_table_reads_alike_with_pandas_duckdb_and_polars(practice: Practice, folder: str) -> None:
    for name, table in tables(folder).items():
        path = practice.fleet / "events" / EVENT / f"{folder}-001" / f"{name}.parquet"
        frame = pd.read_parquet(path)
        assert list(frame.columns) == list(table.names)
        assert duckdb.sql(f"select count(*) from read_parquet('{path}')").fetchall() == [(len(frame),)]
        assert polars.read_parquet(path).height == len(frame)
        for column in table.columns:
            if column.type == "time":
                assert str(frame[column.name].dtype) == "datetime64[us, UTC]"


def test_called_sites_have_every_interval_of_the_one_horizon(practice: Practice) -> None:
    proof = json.loads((practice.fleet / "events" / EVENT / "call-001" / "proof.json").read_text())
    grid = pd.date_range(
        proof["horizon_start"], proof["horizon_end"], freq=f"{proof['interval_minutes']}min", inclusive="left"
    )
    frame, windows = table_of(practice, "intervals"), table_of(practice, "windows")
    assert set(frame["site_id"]) == set(windows["site_id"])
    for _, rows in frame.groupby("site_id"):
        assert (pd.DatetimeIndex(rows["interval_start"]) == grid).all()
    change = table_of(practice, "quotes")["change_kw"]
    assert set(change.map(len)) == {len(grid)}


def test_conservation_holds_for_each_called_site_from_the_record_alone(practice: Practice) -> None:
    """First law over the horizon, event less usual: machine cooling = inventory + losses - zone - envelope."""
    frame = table_of(practice, "intervals")
    sites = pd.read_parquet(practice.fleet / "events" / EVENT / "call-001" / "frozen" / "sites.parquet")
    sites = sites.set_index("site_id")
    losses, rises, recharges = [], [], []
    for site_id, rows in frame.groupby("site_id"):
        site, last = sites.loc[site_id], rows.iloc[-1]
        chiller = (rows["direct_kw_th"] + rows["charge_kw_th"] - rows["usual_chiller_kw_th"]).sum() * 0.25
        stored = last["inventory_kwh_th"] - last["usual_inventory_kwh_th"]
        lost = (rows["loss_kw_th"] - rows["usual_loss_kw_th"]).sum() * 0.25
        zone = site["air_kwh_per_k"] * last["zone_rise_k"] + site["mass_kwh_per_k"] * last["zone_mass_rise_k"]
        walls = site["envelope_kw_per_k"] * rows["zone_mean_rise_k"].sum() * 0.25
        terms = np.abs([chiller, stored, lost, zone, walls]).max()
        assert abs(chiller - (stored + lost - zone - walls)) <= 1e-9 * max(terms, 1.0)
        losses.append(rows["loss_kw_th"].sum())
        rises.append(rows["zone_rise_k"].max())
        recharges.append(rows["charge_kw_th"].sum())
    assert max(losses) > 0.0
    assert max(rises) > 0.3
    assert max(recharges) > 0.0


def test_one_site_settled_by_hand_to_the_same_cent(practice: Practice) -> None:
    """Ten-of-ten with its same-day ratio, from the settlement's own tables, for the first final site."""
    folder = "settlement-001"
    sites = table_of(practice, "sites", folder)
    row = sites[(sites["state"] == "final") & (sites["adjustment_kind"] == "ratio")].iloc[0]
    site = row["site_id"]
    days = table_of(practice, "days", folder)
    used = days[(days["site_id"] == site) & days["used"]]["day"]
    slots = table_of(practice, "day_intervals", folder)
    mine = slots[(slots["site_id"] == site) & slots["day"].isin(used)]
    base = mine.groupby("slot")["kw"].mean()
    intervals = table_of(practice, "intervals", folder)
    window = intervals[(intervals["site_id"] == site) & intervals["in_window"]]
    local = window["interval_start"].dt.tz_convert("Europe/Athens")
    slot = (local.dt.hour * 4 + local.dt.minute // 15).to_numpy()
    delivered = base.loc[slot].to_numpy() * row["adjustment"] - window["metered_kw"].to_numpy()
    kwh = delivered.sum() * 0.25
    assert len(used) == 10
    assert kwh == pytest.approx(row["delivered_kwh"], abs=1e-9)
    factor = kwh / row["committed_kwh"]
    assert float(row["capacity_payment"]) == pytest.approx(
        0.30 * row["committed_kwh"] * min(max(factor, 0.0), 1.0), abs=0.005
    )
    assert float(row["energy_payment"]) == pytest.approx(0.12 * max(kwh, 0.0), abs=0.005)
    assert row["total"] == row["capacity_payment"] + row["energy_payment"] + row["penalty"]


def test_quote_says_what_a_call_can_have_and_the_call_succeeds(practice: Practice) -> None:
    quoted = shedwright("quote", "rehearsal", *EVENT_SPAN, "--node", "North", "--json", cwd=practice.folder)
    assert quoted.returncode == 0, quoted.stderr
    told = json.loads(quoted.stdout)["fleet"]
    assert max(told["available_kw"]) >= told["sustained_kw"] > 0.0
    asked = ("call", "rehearsal", "--kw", str(told["sustained_kw"]), *EVENT_SPAN, "--node", "North")
    called = shedwright(
        *asked, "--event", "all-of-it", "--purpose", "rehearsal", "--json", cwd=practice.folder
    )
    assert called.returncode == 0, called.stderr
    assert min(json.loads(called.stdout)["expected_kw"]) >= told["sustained_kw"] - 1e-6


def test_more_than_can_be_given_is_exit_3_and_leaves_nothing(practice: Practice) -> None:
    asked = ("call", "rehearsal", "--kw", "4500", *EVENT_SPAN, "--node", "North", "--event", "too-much")
    ran = shedwright(*asked, "--purpose", "rehearsal", cwd=practice.folder)
    assert ran.returncode == 3
    assert ran.stdout == ""
    assert "the request cannot be met as asked:" in ran.stderr
    assert ran.stderr.count("asked 4,500.0, at most") == 12
    assert "sites limited by: " in ran.stderr
    assert not (practice.fleet / "events" / "too-much").exists()


def test_more_than_the_chillers_are_rated_for_is_exit_2(practice: Practice) -> None:
    asked = ("call", "rehearsal", "--kw", "3500000", *EVENT_SPAN, "--node", "North", "--event", "watts")
    ran = shedwright(*asked, cwd=practice.folder)
    assert ran.returncode == 2
    assert "is more than the rated electric total of all chillers under node North" in ran.stderr
    assert "check the unit (kW, not W)" in ran.stderr


def test_off_the_grid_names_the_two_nearest_times(practice: Practice) -> None:
    ran = shedwright(
        "quote", "rehearsal", "--from", "2026-07-15T16:05", "--to", "2026-07-15T19:00", cwd=practice.folder
    )
    assert ran.returncode == 2
    assert "2026-07-15 16:00 +03:00 and 2026-07-15 16:15 +03:00" in ran.stderr
    assert "Traceback" not in ran.stderr
