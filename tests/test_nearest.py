"""A refused request: what lacks, what binds, and suggestions that are called and succeed; from a folder on."""

from functools import cache
from pathlib import Path
from tempfile import mkdtemp

import numpy as np
import pandas as pd
import pytest
from commands import ASK, run
from fleet_folders import small_tables, write_small_fleet

from fleet import calling, desk, nearest
from fleet.errors import CannotBeMet
from fleet.wall_time import local_text
from fleet.wishes import NONE, Wishes
from sites.direction import Direction

ZONE = "Europe/Athens"


def utc(hour: float, day: str = "2026-07-14") -> np.datetime64:
    """A local hour of the small fleet's day."""
    return np.datetime64(day, "us") + np.timedelta64(round(60 * (hour - 3)), "m")


@cache
def _folder(**fields: object) -> Path:
    """A small fleet with some columns of sites or the limit of node north at other values."""
    tables = small_tables()
    sites, nodes = tables["sites"], tables["nodes"]
    limit = fields.pop("north_limit_kw", None)
    if limit is not None:
        nodes.loc[nodes["node_id"] == "north", "import_limit_kw"] = limit
    return write_small_fleet(Path(mkdtemp()) / "fleet", sites=sites.assign(**fields), nodes=nodes)


@cache
def survey(start: float = 16.0, end: float = 17.0, at: float = 13.0, **fields: object) -> desk.Survey:
    ask = desk.Ask(None, Direction.SHED, utc(at), utc(start), utc(end))
    return desk.survey(_folder(**fields), ask)


def refused(found: desk.Survey, kw, tmp_path: Path, **options) -> tuple[list[str], dict]:
    with pytest.raises(CannotBeMet) as caught:
        calling.call(found, kw, "E", "real", tmp_path, **options)
    assert list(tmp_path.iterdir()) == []
    return str(caught.value).splitlines(), caught.value.detail


def succeeds(detail: dict, at: float, home: Path, node_ids=None, wishes=NONE, **fields: object) -> set[str]:
    """Every suggestion is called on a fresh survey, as a person would, and met; which kinds there were."""
    for place, one in enumerate(detail["can_be_met"]):
        times = (np.datetime64(one[name][:-1], "us") for name in ("event_from", "event_to"))
        ask = desk.Ask(None, Direction.SHED, utc(at), *times)
        kw = np.array(one["kw"])
        made = calling.call(
            desk.survey(_folder(**fields), ask),
            kw if node_ids else kw[0],
            f"S{place}",
            "rehearsal",
            home,
            node_ids=node_ids,
            wishes=wishes,
        )
        assert made.allocation.met
        assert (made.allocation.expected_kw >= kw.ravel() - 1e-6).all()
    return {one["change"] for one in detail["can_be_met"]}


def test_less_and_shorter_can_be_called(tmp_path):
    lines, detail = refused(survey(16.0, 18.0), 235.0, tmp_path)
    assert lines[0] == "the request cannot be met as asked:"
    assert lines[1].startswith("short by up to ")
    rows = detail["intervals"]
    assert len(rows) == 8
    for row in rows:
        assert row["node_id"] == "coast"
        assert row["gap_kw"] == pytest.approx(max(row["requested_kw"] - row["best_answer_kw"], 0.0))
        start = np.datetime64(row["interval_start"][:-1], "us")
        assert (
            f"  {local_text(start, ZONE)}  asked 235.0, at most {row['available_kw']:,.1f} alone, "
            f"best answer {row['best_answer_kw']:,.1f}"
        ) in lines
    less = next(one for one in detail["can_be_met"] if one["change"] == "less")
    assert less["kw"][0][0] == np.floor(detail["sustained_kw"]) > 0.0
    assert succeeds(detail, 13.0, tmp_path) == {"less", "shorter"}
    shorter = next(one for one in detail["can_be_met"] if one["change"] == "shorter")
    assert f"  shorter: --kw 235 --from {shorter['event_from']} --to {shorter['event_to']}" in lines


def test_notice_binds_and_an_hour_later_it_can(tmp_path):
    lines, detail = refused(survey(14.0, 15.0, 13.0), 100.0, tmp_path)
    assert detail["sustained_share"] == 0.0
    assert detail["sustained_share_if_lifted"]["notice"] > 1.0
    assert any(line.endswith(" kW if notice did not bind") for line in lines)
    assert succeeds(detail, 13.0, tmp_path) == {"later"}


def test_call_limits_bind(tmp_path):
    fields = {"hours_per_season": 0.5}
    lines, detail = refused(survey(**fields), 100.0, tmp_path)
    free = nearest.base_share(want(survey(), 100.0))
    assert detail["sustained_share_if_lifted"]["call limits"] == pytest.approx(free, rel=1e-3)
    assert f"+{100.0 * free:,.1f} kW if call limits did not bind" in lines


def want(found: desk.Survey, kw: float) -> nearest.Want:
    ask = calling._request(found, kw, "E", "real", None)
    return nearest.Want(found, ask, np.zeros(found.fleet.roster.count, dtype=bool))


def test_storage_held_back_binds(tmp_path):
    fields = {"held_back_kwh_th": 2200.0}
    _, detail = refused(survey(**fields), 230.0, tmp_path)
    told = detail["sustained_share_if_lifted"]["storage held back"]
    assert told > detail["sustained_share"] + 0.1
    assert told <= nearest.base_share(want(survey(), 230.0)) + 1e-3


def test_a_feeder_binds(tmp_path):
    fields = {"north_limit_kw": 1500.0}
    lines, detail = refused(survey(**fields), 230.0, tmp_path)
    assert detail["sustained_share_if_lifted"]["feeder limits"] > detail["sustained_share"] + 0.1
    assert any(line.endswith(" kW if feeder limits did not bind") for line in lines)
    assert "less" in succeeds(detail, 13.0, tmp_path, **fields)


def test_sites_left_out_bind_and_stay_left_out_in_what_is_suggested(tmp_path):
    wishes = Wishes(exclude=("harbour",))
    lines, detail = refused(survey(), 150.0, tmp_path, wishes=wishes)
    lifted = detail["sustained_share_if_lifted"]["the list of sites to leave out"]
    assert 150.0 * lifted == pytest.approx(nearest.base_share(want(survey(), 150.0)) * 150.0, abs=0.1)
    assert any(line.endswith(" kW if the list of sites to leave out did not bind") for line in lines)
    assert detail["sustained_kw"] < 60.0
    assert succeeds(detail, 13.0, tmp_path, wishes=wishes) == {"less"}


def test_several_nodes_each_gap_and_every_kw_by_the_same_share(tmp_path):
    kw = np.array([[200.0, 220.0, 240.0, 260.0], [150.0, 150.0, 0.0, 150.0]])
    nodes = ("coast", "north")
    lines, detail = refused(survey(), kw, tmp_path, node_ids=nodes)
    share = detail["sustained_share"]
    assert 0.0 < share < 1.0
    assert f"at most {share:.1%} of every kW asked can be had in all intervals together" in lines
    assert len(detail["intervals"]) == 7
    assert sum(line.startswith("  north 2026-07-14 16:") for line in lines) == 3
    less = np.array(detail["can_be_met"][0]["kw"])
    assert less == pytest.approx(np.floor(100.0 * share) / 100.0 * kw)
    assert f"  less: every kW of the request times {less[0, 0] / 200.0:.2f}" in lines
    assert succeeds(detail, 13.0, tmp_path, node_ids=nodes) == {"less"}


def test_in_an_emergency_the_best_answer_found_counts_even_if_short(tmp_path):
    made = calling.call(survey(), 400.0, "E", "rehearsal", tmp_path, within=2.0)
    proof = made.proof
    assert not proof["met"]
    assert proof["shortfall_kwh"] > 0.0
    assert made.allocation.expected_kw.min() > 200.0
    assert proof["objective"] - proof["bound"] == pytest.approx(proof["gap_money"])
    assert made.explained is None


def test_a_site_that_must_be_in_but_cannot_says_why(tmp_path):
    lines, detail = refused(survey(), 100.0, tmp_path, wishes=Wishes(include=("ward",)))
    assert lines == [
        "the call cannot be made with every site that must be in:",
        "  ward has nothing to give in these hours: recovery",
        "take it off --include, or change hours, node or kW",
    ]
    assert detail == {"cannot_include": {"ward": "has nothing to give in these hours: recovery"}}


def test_a_request_file_on_the_command_line(tmp_path):
    fleet = _folder()
    file = tmp_path / "asked.csv"
    rows = [
        f"2026-07-14T16:{minute:02d}+03:00,{kw},coast"
        for minute, kw in ((0, 90), (15, 80), (30, 85), (45, 80))
    ]
    rows += [f"2026-07-14T16:{minute:02d}+03:00,20,north" for minute in (0, 15, 30, 45)]
    file.write_text("\n".join(["interval_start,kw,node_id", *rows]) + "\n")
    ran = run("call", fleet, "--request", file, "--kw", 5, *ASK[4:])
    assert ran.code == 2
    assert ran.err.strip() == "--request together with --kw: the file has times and kW; leave those out"
    ran = run("call", fleet, "--at", "2026-07-14T13:00")
    assert ran.code == 2
    assert ran.err.strip() == (
        "--kw, --from, --to missing: give --kw with --from and --to, or --request FILE instead of all three"
    )
    file.write_text(file.read_text().replace("north", "nroth"))
    ran = run("call", fleet, "--request", file, *ASK[4:])
    assert ran.code == 2
    assert ran.err.strip() == "node 'nroth' is not in the network; known nodes: coast, north, south"
    file.write_text(file.read_text().replace("nroth", "north"))
    ran = run("call", fleet, "--request", file, *ASK[4:], "--event", "by-file", "--purpose", "rehearsal")
    assert ran.code == 0, ran.err
    record = pd.read_parquet(fleet / "events" / "by-file" / "call-001" / "request.parquet")
    assert record.groupby("node_id")["requested_kw"].sum().to_dict() == {"coast": 335.0, "north": 80.0}
    assert (record["expected_kw"] >= record["requested_kw"]).all()
    assert record.loc[record["node_id"] == "north", "within_node_id"].eq("coast").all()
    audited = run("audit", fleet, "by-file")
    assert audited.code == 0, audited.out
    again = run(
        "call", fleet, "--kw", 100, *ASK, "--event", "also", "--include", "harbour", "--exclude", "harbour"
    )
    assert again.code == 2
    assert again.err.strip() == (
        "--include and --exclude both name harbour: a site is called or not; take it off one list"
    )
    assert run("call", fleet, "--kw", 100, *ASK, "--within", 0).err.strip() == (
        "call, column within: came 0.0; expected seconds above 0; leave it out to search by counted work"
    )
