"""Tanks held to what the loop's temperatures let them do: a colder return, and salt that melts above the supply."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from fleet_folders import write_small_fleet
from made_sites import made_outlook, made_roster, made_standing

from fleet.folder import open_folder
from fleet.resolve import resolve
from sites.ground import usual_course
from sites.roster import TANK_KINDS


def salted(return_c: float, supply_c: float):
    """A plant whose tank is to carry all load on peak, of eutectic salt."""
    roster = made_roster((0,), return_c=return_c, supply_c=supply_c)
    kind = np.full_like(roster.tanks.kind, TANK_KINDS.index("eutectic_salt"))
    roster = replace(roster, tanks=replace(roster.tanks, kind=kind))
    return roster, usual_course(roster, made_outlook(roster), made_standing(roster))


@pytest.mark.parametrize(("return_c", "supply_c", "share"), [(13.0, 5.0, 4.7 / 8.0), (14.0, 9.0, 1.0)])
def test_salt_takes_on_what_lies_above_its_melting_point(
    return_c: float, supply_c: float, share: float
) -> None:
    """8.3 degC (Chen and Sheen 1993): of 13 to 5 degC it can do 4.7 K of 8, of 14 to 9 degC all."""
    _, course = salted(return_c, supply_c)
    on_peak = slice(0, 8)
    drawn = course.discharge_kw_th[0, :, on_peak].sum(axis=0)
    np.testing.assert_allclose(drawn, share * course.load_kw_th[0, on_peak], rtol=1e-9)
    made = course.direct_kw_th[0, :, on_peak].sum(axis=0)
    np.testing.assert_allclose(drawn + made, course.load_kw_th[0, on_peak], rtol=1e-9)


def test_a_loop_all_below_the_melting_point_gets_nothing_from_salt() -> None:
    _, course = salted(8.0, 4.0)
    assert course.discharge_kw_th.max() == 0.0


def tank_frames(tmp_path, design_return_c: str, limit: str = "") -> tuple[pd.DataFrame, tuple]:
    """The small fleet's first tank as one of chilled water, 1,000 kWh_th at a design return; its site 5 to 12 degC."""
    folder = open_folder(write_small_fleet(tmp_path / "fleet"))
    frames = dict(folder.frames)
    tanks, sites = frames["tanks"].iloc[:1].copy(), frames["sites"].copy()
    tanks["kind"], tanks["capacity_kwh_th"], tanks["capacity_ton_h"] = "chilled_water", 1000.0, np.nan
    tanks["design_return_c"] = float(design_return_c) if design_return_c else np.nan
    tanks["discharge_limit_kw_th"] = float(limit) if limit else np.nan
    tanks["charge_limit_kw_th"] = np.nan
    sites["supply_c"], sites["return_c"] = 5.0, 12.0
    resolved = resolve(frames | {"tanks": tanks, "sites": sites}, folder.settings)
    return resolved.tanks, resolved.assumed


def test_a_return_colder_than_design_shrinks_a_chilled_water_tank(tmp_path) -> None:
    """Stated at 15 degC return, 7 of 10 K are left: 700 kWh_th, 199.04 ton-h, and its assumed flow limit with it."""
    tanks, assumed = tank_frames(tmp_path, "15")
    row = tanks.iloc[0]
    assert row["capacity_kwh_th"] == pytest.approx(700.0)
    assert row["capacity_ton_h"] == pytest.approx(700.0 / 3.516853)
    assert row["discharge_limit_kw_th"] == pytest.approx(140.0)
    assert row["charge_limit_kw_th"] == pytest.approx(140.0)
    assert row["design_return_c"] == 12.0
    told = [one for one in assumed if one.column == "capacity_kwh_th"]
    assert [(one.value, one.why) for one in told] == [
        ("700", "less than stated: the return is colder than the tank's design return")
    ]


@pytest.mark.parametrize("design", ["", "12", "10"])
def test_a_return_at_or_above_design_leaves_the_tank_as_stated(tmp_path, design: str) -> None:
    tanks, assumed = tank_frames(tmp_path, design)
    assert tanks.iloc[0]["capacity_kwh_th"] == 1000.0
    assert not [one for one in assumed if one.column == "capacity_kwh_th"]


def test_a_given_flow_limit_stays(tmp_path) -> None:
    tanks, _ = tank_frames(tmp_path, "15", limit="150")
    assert tanks.iloc[0]["discharge_limit_kw_th"] == 150.0
