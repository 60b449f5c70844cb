"""Files of readings named by hand: other forms brought to the meters table, what cannot be is refused."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from commands import called_fleet, run
from feeds import START, block, feed, meter_reading, reading_type, usage_point

from fleet.errors import FleetError
from fleet.folder import FleetFolder, read_meters
from fleet.meter_files import read_meter_file
from fleet.schema import tables
from fleet.settings import Settings
from fleet.tables import empty_frame
from sites.chiller import RATED_COP_MINIMUM

SINCE, UNTIL = np.datetime64("2025-07-10T00:00", "us"), np.datetime64("2025-07-11T00:00", "us")


def folder_of(path: Path, minutes: int = 15) -> FleetFolder:
    settings = Settings(name="f", timezone="America/New_York", currency="USD", interval_minutes=minutes)
    frames = {name: empty_frame(table) for name, table in tables("fleet").items()}
    frames["meter_map"] = pd.DataFrame(
        {"meter_id": ["m1", "House"], "site_id": ["a", "b"], "role": "building", "sign": 1}
    )
    return FleetFolder(path, settings, frames, {}, {}, [])


def read(folder: Path, text: str, minutes: int = 15, name: str = "given.csv") -> pd.DataFrame:
    path = folder / name
    path.write_text(text)
    frame = read_meter_file(folder_of(folder, minutes), SINCE, UNTIL, path).frame
    return frame.sort_values(["meter_id", "interval_start"], ignore_index=True)


def refusal(folder: Path, text: str, minutes: int = 15) -> str:
    with pytest.raises(FleetError) as caught:
        read(folder, text, minutes)
    return str(caught.value)


def test_energy_and_interval_ends_become_power_and_starts(tmp_path: Path) -> None:
    text = (
        "meter_id,interval_end,kwh\nm1,2025-07-10T15:15Z,25\nm1,2025-07-10T15:30Z,30\nm1,2025-07-10T15:45Z,\n"
    )
    found = read(tmp_path, text)
    assert found["kw"].tolist()[:2] == [100.0, 120.0]
    assert found["quality"].tolist() == ["measured", "measured", "missing"]
    assert found["interval_start"].dt.strftime("%H:%M").tolist() == ["15:00", "15:15", "15:30"]


def test_finer_readings_are_averaged_and_a_part_is_missing(tmp_path: Path) -> None:
    rows = [(f"2025-07-10T15:{minute:02d}Z", 100 + minute) for minute in range(0, 40, 5) if minute != 35]
    text = "meter_id,interval_start,kw,quality\n" + "".join(
        f"m1,{at},{kw},{'edited' if kw == 120 else 'measured'}\n" for at, kw in rows
    )
    found = read(tmp_path, text)
    assert found["kw"].tolist()[:2] == [105.0, 120.0]
    assert found["quality"].tolist() == ["measured", "edited", "missing"]


def test_coarser_readings_are_refused_and_never_spread(tmp_path: Path) -> None:
    text = "meter_id,interval_start,kw\nm1,2025-07-10T15:00Z,1\nm1,2025-07-10T16:00Z,2\n"
    assert refusal(tmp_path, text) == (
        "given.csv, column interval_start: came intervals of 60 minutes for meter m1; expected the fleet's 15 "
        "minutes, or parts of it; give finer readings; coarse ones are never spread"
    )


def test_megawatts_and_two_forms_at_once_are_refused(tmp_path: Path) -> None:
    assert refusal(tmp_path, "meter_id,interval_start,mw\nm1,2025-07-10T15:00Z,1\n") == (
        "given.csv, row 1, column mw: came readings in MW; expected kw or kwh; "
        "multiply by 1000 and name the column kw"
    )
    both = "meter_id,interval_start,interval_end,kw,kwh\nm1,2025-07-10T15:00Z,2025-07-10T15:15Z,1,1\n"
    assert refusal(tmp_path, both).splitlines() == [
        "given.csv, row 1, column interval_end: came both interval_start and interval_end; expected one of them; "
        "take one column out",
        "given.csv, row 1, column kwh: came both kw and kwh; expected one of them; take one column out",
    ]


def test_times_of_an_unknown_meter_and_off_the_grid_are_refused(tmp_path: Path) -> None:
    assert refusal(tmp_path, "meter_id,interval_start,kwh\nx,2025-07-10T15:00Z,1\n").startswith(
        "given.csv, row 2, column meter_id: came 'x'; expected a meter_id of meter_map; add it to meter_map"
    )
    odd = "meter_id,interval_start,kwh\nm1,2025-07-10T15:02Z,1\nm1,2025-07-10T15:07Z,1\n"
    assert refusal(tmp_path, odd).splitlines()[0] == (
        "given.csv, column interval_start: came 2025-07-10T15:02:00Z for meter m1; expected starts on the 5-minute "
        "grid; correct the times"
    )


def test_a_plain_table_goes_the_plain_way_and_another_year_is_left_out(tmp_path: Path) -> None:
    text = (
        "meter_id,interval_start,kw\nm1,2025-07-10T15:00Z,7\nm1,2025-07-10T15:15Z,8\nm1,2024-07-10T15:00Z,9\n"
    )
    assert read(tmp_path, text)["kw"].tolist() == [7.0, 8.0]


def test_a_feed_goes_by_title_or_by_the_usage_points_number(tmp_path: Path) -> None:
    text = feed(
        usage_point("01", "House"),
        meter_reading(),
        reading_type(),
        block([25_000]),
        usage_point("m1", "anything"),
        meter_reading("1", "7", "m1"),
        block([50_000], start=START + 900, point="m1"),
    )
    found = read(tmp_path, text, name="feed.xml")
    assert list(zip(found["meter_id"], found["kw"])) == [("House", 100.0), ("m1", 200.0)]


@pytest.mark.parametrize("column", ["kw", "kwh"])
def test_a_file_of_another_year_is_refused(tmp_path: Path, column: str) -> None:
    text = f"meter_id,interval_start,{column}\nm1,2024-07-10T15:00Z,7\nm1,2024-07-10T15:15Z,8\n"
    assert refusal(tmp_path, text) == (
        "given.csv: came readings from 2024-07-10T15:00Z to 2024-07-10T15:15Z; expected some from "
        "2025-07-10T00:00:00.000000Z to before 2025-07-11T00:00:00.000000Z, the days that the settlement looks at; "
        "name the file of the event"
    )


def test_megawatts_in_a_column_of_kw_are_refused_on_both_ways(tmp_path: Path) -> None:
    """Held against the rated power of the chillers as the call froze them."""
    fleet = called_fleet(tmp_path)
    given = tmp_path / "late.csv"
    rows = [f"ward,2026-07-14T{hour}:{minute:02d}Z" for hour in (13, 14) for minute in (0, 15, 30, 45)]
    given.write_text("meter_id,interval_start,kw\n" + "".join(f"{row},0.87\n" for row in rows))
    least = 0.005 * (800.0 + 900.0) / RATED_COP_MINIMUM["water_cooled_centrifugal"]
    ran = run("settle", fleet, "A", "--meter", given)
    assert (ran.code, ran.out) == (2, "")
    assert ran.err == (
        "late.csv, row 2, column kw: came 0.87 as the highest of ward; expected at least 0.5% of the rated power of "
        f"its chillers, {least:.6g} kW; is it in MW? give it in kW\n"
    )
    meters = pd.read_csv(fleet / "meters.csv")
    meters.assign(kw=meters["kw"] / 1000.0).to_csv(fleet / "meters.csv", index=False)
    ran = run("settle", fleet, "A")
    assert (ran.code, ran.out) == (2, "")
    assert [line.split(" as ")[0] for line in ran.err.splitlines()] == [
        "meters.csv, row 2, column kw: came 0.532",
        "meters.csv, row 290, column kw: came 0.336",
        "meters.csv, row 578, column kw: came 0.868",
    ]
    assert not (fleet / "events" / "A" / "settlement-002").exists()


AUTUMN_SINCE, AUTUMN_UNTIL = np.datetime64("2025-11-02T00:00", "us"), np.datetime64("2025-11-04T00:00", "us")
REPEATED = "meter_id,interval_start,kw\nm1,2025-11-02T01:00,1\nm1,2025-11-02T01:00,2\nm1,2025-11-02T02:00,3\n"


def autumn(path: Path, times: str) -> FleetFolder:
    (path / "given.csv").write_text(REPEATED)
    found = folder_of(path, 60)
    return replace(found, settings=found.settings.model_copy(update={"tables": {"meters_time": times}}))


def test_local_times_over_the_autumn_change_need_a_declared_reading(tmp_path: Path) -> None:
    with pytest.raises(FleetError) as caught:
        read_meter_file(autumn(tmp_path, "offset"), AUTUMN_SINCE, AUTUMN_UNTIL, tmp_path / "given.csv")
    wanted = "expected a time with an offset (declare [tables] ..._time if all are America/New_York or UTC); correct it"
    assert str(caught.value).split("\n") == [
        f"given.csv, row {row}, column interval_start: came '2025-11-02T0{hour}:00'; {wanted}"
        for row, hour in ((2, 1), (3, 1), (4, 2))
    ]
    found = read_meter_file(autumn(tmp_path, "local"), AUTUMN_SINCE, AUTUMN_UNTIL, tmp_path / "given.csv")
    # 01:00 EDT, 01:00 EST, 02:00 EST.
    assert [f"{at:%H:%M}" for at in found.frame["interval_start"]] == ["05:00", "06:00", "07:00"]
    assert found.notes == ["given.csv: 2 rows of the repeated autumn hour told apart by their order"]


def test_the_folders_own_table_may_give_energy_and_interval_ends(tmp_path: Path) -> None:
    (tmp_path / "meters.csv").write_text(
        "meter_id,interval_end,kwh\nm1,2025-07-10T12:15Z,25\nm1,2025-07-10T12:30Z,26\nm1,2025-07-10T12:45Z,\n"
    )
    found = read_meters(folder_of(tmp_path), SINCE, UNTIL)
    assert [f"{at:%H:%M}" for at in found.frame["interval_start"]] == ["12:00", "12:15", "12:30"]
    assert found.frame["kw"].tolist() == pytest.approx([100.0, 104.0, float("nan")], nan_ok=True)
    assert found.frame["quality"].tolist() == ["measured", "measured", "missing"]
    assert found.notes == ["meters.csv: interval ends read as such", "meters.csv: kWh as kW"]


def test_megawatts_in_the_folders_own_table_are_refused(tmp_path: Path) -> None:
    (tmp_path / "meters.csv").write_text("meter_id,interval_start,mw\nm1,2025-07-10T12:15Z,0.1\n")
    with pytest.raises(FleetError) as caught:
        read_meters(folder_of(tmp_path), SINCE, UNTIL)
    assert str(caught.value) == (
        "meters.csv, row 1, column mw: came readings in MW; expected kw or kwh; multiply by 1000 and name the column kw"
    )
