"""Requests from a file: what is read, and every refusal's words."""

import numpy as np
import pandas as pd
import pytest

from fleet.errors import FleetError, Refused
from fleet.request import outermost
from fleet.request_file import read_request
from fleet.settings import Settings

SETTINGS = Settings(name="made up", timezone="Europe/Athens", currency="EUR")


def written(tmp_path, text):
    path = tmp_path / "asked.csv"
    path.write_text(text, encoding="utf-8")
    return path


def test_kw_by_interval_of_the_whole_fleet(tmp_path):
    path = written(tmp_path, "interval_start,kw\n2026-07-15T16:00+03:00,100\n2026-07-15T16:15+03:00,120.5\n")
    read = read_request(path, SETTINGS)
    assert read.node_ids == (None,)
    assert read.event_from == np.datetime64("2026-07-15T13:00")
    assert read.event_to == np.datetime64("2026-07-15T13:30")
    assert read.kw.tolist() == [[100.0, 120.5]]
    assert read.notes == ()
    assert read_request(path, SETTINGS, "North").node_ids == ("North",)


def test_parquet_with_two_nodes_and_an_interval_that_one_has_not(tmp_path):
    start = pd.Timestamp("2026-07-15T13:00Z")
    step = pd.Timedelta(minutes=15)
    frame = pd.DataFrame(
        {
            "interval_start": [start, start + step, start + step],
            "kw": [50.0, 60.0, 70.0],
            "node_id": ["North", "North", "South"],
        }
    )
    frame.to_parquet(tmp_path / "asked.parquet")
    read = read_request(tmp_path / "asked.parquet", SETTINGS)
    assert read.node_ids == ("North", "South")
    assert read.kw.tolist() == [[50.0, 60.0], [0.0, 70.0]]
    assert read.notes == (
        "asked.parquet: node South has no kW in 1 of 2 intervals; nothing is asked of it there",
    )


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        (
            "2026-07-15T16:00+03:00,100\n2026-07-15T16:00+03:00,90\n",
            "asked.csv, row 3, column interval_start: came 2026-07-15 13:00:00+00:00; expected each node and "
            "interval once; remove one of the rows",
        ),
        (
            "2026-07-15T16:00+03:00,100\n2026-07-15T17:00+03:00,90\n",
            "asked.csv, column interval_start: came no row for 3 intervals, first 2026-07-15 16:15 +03:00; expected "
            "intervals without a gap between them; fill the gap, or make two calls",
        ),
        (
            "2026-07-15T16:00+03:00,0\n",
            "asked.csv, row 2, column kw: came 0.0; expected a number above 0; leave the row out where nothing is "
            "asked; for the other way use --direction",
        ),
    ],
)
def test_refusals(tmp_path, rows, message):
    with pytest.raises(Refused) as caught:
        read_request(written(tmp_path, "interval_start,kw\n" + rows), SETTINGS)
    assert str(caught.value) == message


def test_times_off_the_grid_are_refused(tmp_path):
    with pytest.raises(Refused) as caught:
        read_request(written(tmp_path, "interval_start,kw\n2026-07-15T16:07+03:00,5\n"), SETTINGS)
    assert str(caught.value) == (
        "asked.csv, row 2, column interval_start: came '2026-07-15T16:07+03:00'; expected a time on the fleet's "
        "15-minute grid; correct it"
    )


def test_no_file(tmp_path):
    with pytest.raises(FleetError) as caught:
        read_request(tmp_path / "none.csv", SETTINGS)
    assert str(caught.value).endswith("there is no such request file; name one with interval_start and kw")


def test_outermost_rows_hold_those_within():
    """North within the fleet, South beside it: what is asked in all is the outermost nodes' sum."""
    start = pd.to_datetime(["2026-07-15T13:15Z", "2026-07-15T13:00Z"] * 3)
    frame = pd.DataFrame(
        {
            "node_id": ["North", "North", "N1", "N1", "South", "South"],
            "within_node_id": [None, None, "North", "North", None, None],
            "interval_start": start,
            "requested_kw": [10.0, 20.0, 5.0, 6.0, 1.0, 2.0],
            "expected_kw": [11.0, 21.0, 7.0, 8.0, 3.0, 4.0],
        }
    )
    whole = outermost(frame)
    assert whole["requested_kw"].tolist() == [22.0, 11.0]
    assert whole["expected_kw"].tolist() == [25.0, 14.0]
