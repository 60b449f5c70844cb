"""Steps of an order: hand-made courses, each time and value worked out by hand."""

import pandas as pd
import pytest
from made_record import CHILLERS, END, START, WINDOWS, call_frames, frozen_frames

from fleet.errors import FleetError
from fleet.steps import COLUMNS, steps

SITE = "harbour-court"


def rows(frames: dict[str, pd.DataFrame], site: str = SITE) -> list[tuple[str, str, str]]:
    """(local time of Athens, action, unit) of a site's steps in order."""
    found = frames["steps"][frames["steps"]["site_id"] == site]
    local = found["at"].dt.tz_convert("Europe/Athens").dt.strftime("%d %H:%M")
    return list(zip(local, found["action"], found["unit_id"]))


def four_machines(**minutes: float) -> tuple[dict[str, object], ...]:
    """CH-1 to CH-4 of the first site in loading order, with these min_off_minutes."""
    first = tuple(
        {
            "site_id": SITE,
            "chiller_id": f"CH-{n}",
            "loading_order": n,
            "min_off_minutes": minutes.get(f"ch{n}", 10.0),
        }
        for n in range(1, 5)
    )
    return (*first, CHILLERS[2])


def windows_off(*off: str, **more: object) -> tuple[dict[str, object], ...]:
    return ({**WINDOWS[0], "chiller_ids": list(off), **more}, WINDOWS[1])


def test_every_step_of_the_made_call():
    frames = call_frames()
    assert rows(frames) == [
        ("16 16:00", "demand_limit", "CH-1"),
        ("16 16:00", "off", "CH-2"),
        ("16 19:00", "demand_limit_removed", "CH-1"),
        ("16 19:00", "restart", "CH-2"),
        ("16 22:00", "recharge_may_start", "T-1"),
        ("17 06:00", "full_by", "T-1"),
    ]
    assert rows(frames, "mill-school") == [
        ("16 16:00", "off", "W-1"),
        ("16 19:00", "restart", "W-1"),
        ("16 23:00", "recharge_may_start", "TES-1"),
        ("18 00:00", "full_by", "TES-1"),
    ]
    made = frames["steps"]
    assert tuple(made.columns) == COLUMNS
    assert str(made["at"].dtype) == "datetime64[us, UTC]"
    values = made[made["site_id"] == SITE].set_index("action")["value"].dropna().to_dict()
    assert values == {
        "demand_limit": 0.75,
        "demand_limit_removed": 1.0,
        "recharge_may_start": 240.0,
        "full_by": 2000.0,
    }
    assert not made["detail"].str.contains(r"[^\x20-\x7e]").any()


def test_details_carry_the_value_and_its_unit():
    made = call_frames()["steps"].set_index(["site_id", "action"])["detail"]
    assert made[SITE, "demand_limit"] == "load limit 75 % of full load"
    assert made[SITE, "recharge_may_start"] == "at most 240 kW_th into the tank"
    assert made[SITE, "full_by"] == "back at its usual level of 2000 kWh_th"
    assert made["mill-school", "full_by"] == "not full within the horizon; 3517 kWh_th then"


def test_restarts_are_staggered_in_loading_order():
    frames = call_frames(chillers=four_machines(), windows=windows_off("CH-2", "CH-3", "CH-4"), limits={})
    restarts = [row for row in rows(frames) if row[1] == "restart"]
    assert [(at, unit) for at, _, unit in restarts] == [
        ("16 19:00", "CH-2"),
        ("16 19:05", "CH-3"),
        ("16 19:10", "CH-4"),
    ]


def test_a_long_minimum_off_time_holds_one_machine_and_not_the_others():
    chillers = four_machines(ch2=240.0)
    frames = call_frames(chillers=chillers, windows=windows_off("CH-2", "CH-3", "CH-4"), limits={})
    restarts = [(at, unit) for at, action, unit in rows(frames) if action == "restart"]
    assert restarts == [("16 19:00", "CH-3"), ("16 19:05", "CH-4"), ("16 20:00", "CH-2")]
    made = frames["steps"]
    detail = made[(made["unit_id"] == "CH-2") & (made["action"] == "restart")]["detail"].item()
    assert detail == "after its minimum off time of 240 min"


def test_two_machines_ready_at_once_after_a_long_off_time_still_keep_the_gap():
    frames = call_frames(
        chillers=four_machines(ch2=182.0, ch3=180.0, ch4=183.0),
        windows=windows_off("CH-2", "CH-3", "CH-4"),
        limits={},
    )
    restarts = [(at, unit) for at, action, unit in rows(frames) if action == "restart"]
    assert restarts == [("16 19:00", "CH-3"), ("16 19:05", "CH-2"), ("16 19:10", "CH-4")]


def test_restart_times_equal_a_plain_loop():
    minutes = {"ch1": 200.5, "ch2": 10.0, "ch3": 194.0, "ch4": 200.0}
    frames = call_frames(
        chillers=four_machines(**minutes), windows=windows_off("CH-1", "CH-2", "CH-3", "CH-4"), limits={}
    )
    ready = sorted((max(180.0, found), int(unit[2:])) for unit, found in minutes.items())
    expected, last = {}, float("-inf")
    for after_start, number in ready:
        last = max(last + 5.0, after_start)
        expected[f"CH-{number}"] = (START + pd.Timedelta(minutes=last)).ceil("min")
    made = frames["steps"]
    restart = made[(made["site_id"] == SITE) & (made["action"] == "restart")].set_index("unit_id")["at"]
    assert restart.to_dict() == expected


def test_an_idle_machine_is_inhibited_until_the_end_and_a_free_running_one_is_left_alone():
    frames = call_frames(
        chillers=four_machines(), windows=windows_off("CH-4"), limits={(SITE, "CH-2"): 0.5}, idle=("CH-3",)
    )
    held = [row for row in rows(frames) if row[2] in ("CH-1", "CH-2", "CH-3")]
    assert held == [
        ("16 16:00", "inhibit", "CH-3"),
        ("16 16:00", "demand_limit", "CH-2"),
        ("16 19:00", "demand_limit_removed", "CH-2"),
        ("16 19:00", "inhibit_removed", "CH-3"),
    ]


def test_a_site_called_alone_has_the_same_steps_as_in_a_fleet():
    frames, frozen = call_frames(), frozen_frames()
    alone = [
        steps(
            frames["windows"][frames["windows"]["site_id"] == site],
            frozen["chillers"],
            frozen["sites"],
            frames["machines"],
            frames["tanks"],
            15,
        )
        for site in (SITE, "mill-school")
    ]
    pd.testing.assert_frame_equal(pd.concat(alone, ignore_index=True), frames["steps"])


def test_a_tank_that_is_not_charged_again_has_no_recharge_step():
    frames, frozen = call_frames(), frozen_frames()
    frames["tanks"]["charge_kw_th"] = 0.0
    made = steps(
        frames["windows"], frozen["chillers"], frozen["sites"], frames["machines"], frames["tanks"], 15
    )
    assert "recharge_may_start" not in set(made["action"])
    assert (made["action"] == "full_by").sum() == 2


def test_charging_inside_the_window_is_no_recharge():
    frames, frozen = call_frames(), frozen_frames()
    tanks = frames["tanks"]
    tanks.loc[(tanks["interval_start"] >= START) & (tanks["interval_start"] < END), "charge_kw_th"] = 50.0
    made = steps(frames["windows"], frozen["chillers"], frozen["sites"], frames["machines"], tanks, 15)
    pd.testing.assert_frame_equal(made, frames["steps"])


def test_a_machine_that_is_named_off_but_runs_is_refused():
    frames, frozen = call_frames(), frozen_frames()
    frames["machines"]["load_limit_fraction"] = 1.0
    with pytest.raises(FleetError) as refused:
        steps(frames["windows"], frozen["chillers"], frozen["sites"], frames["machines"], frames["tanks"], 15)
    assert str(refused.value) == (
        "machines: harbour-court CH-2, mill-school W-1: off in windows.chiller_ids or at load limit 0 in its "
        "course, not both; the call contradicts itself"
    )


def test_a_called_site_with_no_row_of_its_own_is_refused():
    frames, frozen = call_frames(), frozen_frames()
    given = (
        frames["windows"],
        frozen["chillers"],
        frozen["sites"].iloc[1:],
        frames["machines"],
        frames["tanks"],
    )
    with pytest.raises(FleetError) as refused:
        steps(*given, 15)
    assert str(refused.value) == (
        "sites: no row with restart_gap_minutes for harbour-court; the call is incomplete"
    )


def test_a_machine_with_no_row_or_no_course_is_refused():
    frames, frozen = call_frames(), frozen_frames()
    w, m, t = frames["windows"], frames["machines"], frames["tanks"]
    with pytest.raises(FleetError, match="no row with min_off_minutes for harbour-court CH-1; the call is"):
        steps(w, frozen["chillers"].iloc[1:], frozen["sites"], m, t, 15)
    with pytest.raises(FleetError, match="no rows inside the window of site mill-school; the call is"):
        steps(w, frozen["chillers"], frozen["sites"], m[m["site_id"] != "mill-school"], t, 15)


def test_full_again_off_the_grid_is_refused():
    frames, frozen = call_frames(), frozen_frames()
    frames["windows"]["full_again_at"] = pd.Timestamp("2026-07-17 03:07", tz="UTC")
    with pytest.raises(
        FleetError, match="full_again_at of site harbour-court, mill-school is no interval's end"
    ):
        steps(frames["windows"], frozen["chillers"], frozen["sites"], frames["machines"], frames["tanks"], 15)
