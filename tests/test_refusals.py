"""What the command refuses, each with its whole message and its exit code; folders stay as they were."""

import subprocess
import sys
from pathlib import Path
from unittest import mock

import pandas as pd
import pytest
from commands import ASK, called_fleet, run
from fleet_folders import SETTINGS, set_cell, small_tables, write_small_fleet
from permission_bits import heed_permission_bits

from sites.chiller import RATED_COP_MINIMUM

NEEDED = ("name", "timezone", "currency")
KW = "kW are positive in the event's direction; for the other way use --direction"
ID = "expected 1 to 64 letters, digits, - or _; give --event an id that can name a folder"


@pytest.fixture(scope="module")
def fleet(tmp_path_factory):
    """The small fleet, never written to."""
    return write_small_fleet(tmp_path_factory.mktemp("refusals") / "fleet")


def refused(*arguments: object, code: int = 2) -> str:
    ran = run(*arguments)
    assert (ran.code, ran.out) == (code, ""), ran
    return ran.err.removesuffix("\n")


def told_by_check(path: Path) -> str:
    """The one problem that `check` tells, without its indent."""
    ran = run("check", path)
    assert ran.code == 2, ran
    lines = ran.out.splitlines()
    assert lines[0] == "1 problem:", lines[:4]
    return f"{lines[1].strip()}: {lines[2].strip()}"


TIMES = {
    "backwards": (
        ("--from", "2026-07-14T17:00", "--to", "2026-07-14T16:00", "--at", "2026-07-14T13:00"),
        "--to is not after --from: an event ends after it starts; exchange them or move the end",
    ),
    "of zero length": (
        ("--from", "2026-07-14T17:00", "--to", "2026-07-14T17:00", "--at", "2026-07-14T13:00"),
        "--to is not after --from: an event ends after it starts; exchange them or move the end",
    ),
    "before --at": (
        ("--from", "2026-07-14T12:45", "--to", "2026-07-14T14:00", "--at", "2026-07-14T13:00"),
        "--from lies before --at: an event cannot start before it is called; move --from, or give --at the time "
        "of the call",
    ),
    "off the grid": (
        ("--from", "2026-07-14T16:07", "--to", "2026-07-14T17:00", "--at", "2026-07-14T13:00"),
        "time 2026-07-14 16:07:00 +03:00 is not on the 15-minute grid; nearest are 2026-07-14 16:00 +03:00 and "
        "2026-07-14 16:15 +03:00",
    ),
    "no time": (
        ("--from", "tomorrow", "--to", "2026-07-14T17:00", "--at", "2026-07-14T13:00"),
        "time 'tomorrow': expected ISO 8601 such as 2026-07-14T16:00+03:00, or local time such as 2026-07-14T16:00",
    ),
    "a day number of a spreadsheet": (
        ("--from", "46217.5", "--to", "2026-07-14T17:00", "--at", "2026-07-14T13:00"),
        "time '46217.5': expected ISO 8601 such as 2026-07-14T16:00+03:00, or local time such as 2026-07-14T16:00",
    ),
    "beyond all calendars": (
        ("--from", "9999-12-31T16:00", "--to", "9999-12-31T17:00", "--at", "2026-07-14T13:00"),
        "time '9999-12-31T16:00': expected a time from 1970 to 2199\n"
        "time '9999-12-31T17:00': expected a time from 1970 to 2199",
    ),
    "that does not exist": (
        ("--from", "2026-03-29T03:30", "--to", "2026-03-29T05:00", "--at", "2026-03-28T13:00"),
        "time '2026-03-29T03:30': expected a time that exists; the clock of Europe/Athens jumps over it: was it "
        "2026-03-29 02:30 +02:00 or 2026-03-29 04:30 +03:00?",
    ),
    "that exists twice": (
        ("--from", "2026-10-25T03:30", "--to", "2026-10-25T05:00", "--at", "2026-10-24T13:00"),
        "time '2026-10-25T03:30': expected a time that can be told apart, for it exists twice: 2026-10-25 03:30 "
        "+03:00 and 2026-10-25 03:30 +02:00; write it with its offset",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", TIMES)
@pytest.mark.parametrize("command", ["call", "quote"])
def test_an_event_that_is_no_time(fleet, command, case):
    arguments, message = TIMES[case]
    asked = ("--kw", "10") if command == "call" else ()
    assert refused(command, fleet, *asked, *arguments) == message
    assert not (fleet / "events").exists()


@pytest.mark.parametrize(("kw", "came"), [("0", "0.0"), ("-5", "-5.0"), ("nan", "nan"), ("inf", "inf")])
def test_a_request_of_nothing_or_less(fleet, kw, came):
    message = f"call, column kw: came {came}; expected a finite number above 0; {KW}"
    assert refused("call", fleet, "--kw", kw, *ASK) == message


def test_a_request_over_the_chillers_rated_total(fleet):
    screw, centrifugal = RATED_COP_MINIMUM["air_cooled_screw"], RATED_COP_MINIMUM["water_cooled_centrifugal"]
    rated = (1000.0 + 150.0 * 3.516853) / screw + 1700.0 / centrifugal
    said = refused("call", fleet, "--kw", "2500", *ASK)
    assert said == (
        f"--kw 2,500.0 is more than the rated electric total of all chillers under node coast, {rated:,.1f} kW: "
        "check the unit (kW, not W) or the node"
    )


@pytest.mark.parametrize("event", ["../x", "a/b", "a\\b", ".", "..", "", " ", "x" * 65, "a\nb", "é"])
def test_an_event_id_that_names_no_folder(fleet, event):
    assert (
        refused("call", fleet, "--kw", "10", *ASK, f"--event={event}")
        == f"call, column event: came {event!r}; {ID}"
    )


def test_all_that_is_wrong_with_the_words_of_a_call_at_once(fleet):
    said = refused("call", fleet, "--kw", "-1", *ASK, "--event", "a/b", "--purpose", "fun")
    assert said.splitlines() == [
        f"call, column event: came 'a/b'; {ID}",
        "call, column purpose: came 'fun'; expected one of real, test, rehearsal; choose one of them",
        f"call, column kw: came -1.0; expected a finite number above 0; {KW}",
    ]


def test_wrong_words_and_wrong_times_at_once(fleet):
    backwards = ("--from", "2026-07-14T17:00", "--to", "2026-07-14T16:00", "--at", "2026-07-14T13:00")
    said = refused("call", fleet, "--kw", "-5", *backwards, "--direction", "up")
    assert said.splitlines() == [
        f"call, column kw: came -5.0; expected a finite number above 0; {KW}",
        "--direction: came 'up'; expected one of shed, absorb; choose one",
        "--to is not after --from: an event ends after it starts; exchange them or move the end",
    ]
    said = refused("quote", fleet, "--from", "soon", "--to", "2026-07-14T16:07", "--at", "now")
    assert [line.split(":")[0] for line in said.splitlines()] == [
        "time 'now'",
        "time 'soon'",
        "time 2026-07-14 16",
    ]


def test_an_event_that_exists_an_unknown_one_and_a_window_in_force(tmp_path):
    fleet = called_fleet(tmp_path)
    assert refused("call", fleet, "--kw", "10", *ASK, "--event", "A") == (
        f"{fleet}/events/A: there is an event A already, and an event is never written over; "
        "choose another id with --event"
    )
    for command in ("orders", "settle", "audit"):
        assert refused(command, fleet, "../A") == f"{fleet}: no event '../A'; nearest of 1: A"
    said = refused("call", fleet, "--kw", "100", *ASK, "--event", "B", code=3).splitlines()
    assert said[0] == "the request cannot be met as asked:"
    assert (
        "not called: harbour, bound by the call in force A until 2026-07-14 17:00 +03:00; "
        "call them again from then on, or ask at a node without them"
    ) in said
    assert said[-1] == (
        "ask for less, for a shorter time or at a wider node; or take the best answer with --accept-less"
    )
    assert sorted(path.name for path in (fleet / "events").iterdir()) == ["A"]


def test_unknown_words(fleet):
    assert refused("call", fleet, "--kw", "10", *ASK, "--node", "east") == (
        "node 'east' is not in the network; known nodes: coast, north, south"
    )
    assert refused("quote", fleet, *ASK, "--direction", "up") == (
        "--direction: came 'up'; expected one of shed, absorb; choose one"
    )


def test_a_horizon_that_is_not_covered_says_from_when_to_when(fleet):
    late = ("--from", "2026-07-16T16:00", "--to", "2026-07-16T17:00", "--at", "2026-07-16T13:00")
    assert refused("quote", fleet, *late).splitlines()[0] == (
        "weather.csv, column dry_bulb_c: came no value for pier in 96 intervals from 2026-07-17 00:00 +03:00 to "
        "2026-07-18 00:00 +03:00; expected values over the horizon, 2026-07-16 13:00 +03:00 to 2026-07-18 00:00 "
        "+03:00; add the rows, or ask for a time that is covered"
    )


CELLS = {
    "a day number with a time": (
        ("weather", 4, "interval_start", "46217.5"),
        "weather.csv: row 4, column interval_start: came '46217.5'; expected a time in ISO 8601, not a "
        "spreadsheet's day number (46217.5 is 2026-07-14T12:00:00); correct it",
    ),
    "a day number": (
        ("bills", 2, "cycle_end", "46217"),
        "bills.csv: row 2, column cycle_end: came '46217'; expected a date (YYYY-MM-DD), not a spreadsheet's day "
        "number (46217 is 2026-07-14); correct it",
    ),
    "a decimal comma": (
        ("sites", 2, "call_fee", "1,5"),
        "sites.csv: row 2, column call_fee: came '1,5'; expected a number of 0 money or more; correct it (digits "
        "and a decimal point only), or leave it empty if it is not required",
    ),
    "a year before all fleets": (
        ("weather", 4, "interval_start", "0026-07-14T00:30Z"),
        "weather.csv: row 4, column interval_start: came '0026-07-14T00:30Z'; expected a time from 1970 to 2199; "
        "correct it",
    ),
    "a day that does not exist": (
        ("bills", 2, "cycle_end", "2026-06-31"),
        "bills.csv: row 2, column cycle_end: came '2026-06-31'; expected a date (YYYY-MM-DD) that exists, from "
        "1970 to 2199; correct it",
    ),
    "infinity": (
        ("loads", 2, "rest_kw", "inf"),
        "loads.csv: row 2, column rest_kw: came 'inf'; expected a number from -200000 to 200000 kW; correct it "
        "(digits and a decimal point only), or leave it empty if it is not required",
    ),
    "a zero capacity": (
        ("tanks", 2, "capacity_kwh_th", "0"),
        "tanks.csv: row 2, column capacity_kwh_th: came '0'; expected a number from 1 to 2000000 kWh_th; correct "
        "it (digits and a decimal point only), or leave it empty if it is not required",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", CELLS)
def test_a_cell_told_by_check(tmp_path, case):
    (name, row, column, value), message = CELLS[case]
    assert told_by_check(write_small_fleet(tmp_path, **{name: set_cell(name, row, column, value)})) == message


SITES = small_tables()["sites"].to_csv(index=False)
NOT_UTF_8 = "expected text in UTF-8; save it as CSV UTF-8"
FILES = {
    "of zero bytes": (
        b"",
        "came an empty file; expected a heading at least; give it its heading and rows, or remove it",
    ),
    "in Latin-1": (
        SITES.replace("harbour", "häfen").encode("latin-1"),
        f"came bytes that are not UTF-8 (invalid continuation byte); {NOT_UTF_8}",
    ),
    "in UTF-16": (SITES.encode("utf-16"), f"came bytes that are not UTF-8 (invalid start byte); {NOT_UTF_8}"),
    "in UTF-16 without a mark": (
        SITES.encode("utf-16-le"),
        f"row 1: came a zero byte, as UTF-16 text has them; {NOT_UTF_8}",
    ),
    "with semicolons": (
        SITES.replace(",", ";").encode(),
        "row 1: came cells parted by semicolons; expected cells parted by commas; "
        "save it with commas and decimal points",
    ),
    "with a decimal comma bare": (
        SITES.replace("9000.0", "9000,0").encode(),
        "row 2: came 10 cells; expected 9 as in the heading (rows like this: 1); put quotes around a text that "
        "holds a comma, and write numbers with a decimal point",
    ),
}


@pytest.mark.parametrize("case", FILES)
def test_a_file_that_is_no_table(tmp_path, case):
    write_small_fleet(tmp_path)
    content, message = FILES[case]
    (tmp_path / "sites.csv").write_bytes(content)
    assert told_by_check(tmp_path) == f"sites.csv: {message}"


@pytest.mark.parametrize("form", ["byte-order mark", "mixed line ends", "old line ends", "trailing spaces"])
def test_untidy_text_is_read_all_the_same(tmp_path, form):
    first, *rows = SITES.splitlines()
    untidy = {
        "byte-order mark": "\ufeff" + SITES,
        "mixed line ends": f"{first}\r\n{rows[0]}\n{rows[1]}\r{rows[2]}\r\n\n",
        "old line ends": "\r".join([first, *rows]),
        "trailing spaces": "\n".join(line.replace(",", " ,") + "  " for line in [first, *rows]),
    }[form]
    write_small_fleet(tmp_path)
    (tmp_path / "sites.csv").write_bytes(untidy.encode())
    ran = run("check", tmp_path, "--json")
    assert (ran.code, ran.err) == (0, "")


def test_parquet_cut_empty_or_nested(tmp_path):
    write_small_fleet(tmp_path, sites=None)
    path = tmp_path / "sites.parquet"
    small_tables()["sites"].to_parquet(path)
    whole = path.read_bytes()
    end = "expected a whole Parquet file; export it again, or restore it"
    path.write_bytes(whole[: len(whole) // 2])
    cut = told_by_check(tmp_path)
    assert cut.startswith("sites.parquet: came no readable Parquet (")
    assert cut.endswith(end)
    path.write_bytes(b"")
    assert told_by_check(tmp_path).endswith(f"Parquet file size is 0 bytes); {end}")
    small_tables()["sites"].assign(call_fee=[[1.0], [], None]).to_parquet(path)
    said = [line.strip() for line in run("check", tmp_path).out.splitlines()[2:4]]
    assert [line.split(";")[0] for line in said] == [
        "row 1, column call_fee: came b'[1.0]'",
        "row 2, column call_fee: came b'[]'",
    ]


def test_a_folder_where_a_file_should_be_and_a_file_where_a_folder_should_be(tmp_path):
    write_small_fleet(tmp_path, sites=None)
    (tmp_path / "sites.csv").mkdir()
    assert told_by_check(tmp_path) == (
        "sites.csv: came a folder without .parquet files; expected a table; put some there, or remove it"
    )
    (tmp_path / "fleet.toml").unlink()
    (tmp_path / "fleet.toml").mkdir()
    assert refused("check", tmp_path) == (
        f"{tmp_path}/fleet.toml: cannot be read ([Errno 21] Is a directory: '{tmp_path}/fleet.toml'); "
        "save it as UTF-8 text"
    )


def test_a_link_that_leads_nowhere(tmp_path):
    write_small_fleet(tmp_path, sites=None)
    (tmp_path / "sites.csv").symlink_to(tmp_path / "gone.csv")
    assert told_by_check(tmp_path) == (
        "sites.csv: came a file that cannot be read (No such file or directory); expected a table; "
        "check that it is there and may be read"
    )


def test_events_that_are_a_file(tmp_path):
    fleet = write_small_fleet(tmp_path / "fleet")
    (fleet / "events").write_text("ours")
    said = refused("call", fleet, "--kw", "10", *ASK, "--event", "X")
    assert said == (
        f"{fleet}/events/X: could not be written (Not a directory at .making-X-*); nothing was left behind; "
        "free some space or mend the permissions, then run the same command again"
    ).replace(".making-X-*", said.split(" at ")[1].split(")")[0])
    assert (fleet / "events").read_text() == "ours"


def test_no_settings_zero_bytes_of_settings_and_no_fleet(tmp_path):
    assert (
        refused("check", tmp_path)
        == f"{tmp_path}: holds no fleet.toml; `shedwright begin {tmp_path}` starts one"
    )
    (tmp_path / "fleet.toml").write_bytes(b"")
    assert run("check", tmp_path).out.splitlines()[:5] == [
        "3 problems:",
        "  fleet.toml",
        *(f"    column {n}: came nothing; expected a value; add {n} = ... to fleet.toml" for n in NEEDED),
    ]
    (tmp_path / "fleet.toml").write_bytes(SETTINGS.encode("utf-16"))
    assert refused("check", tmp_path).endswith("invalid start byte); save it as UTF-8 text")
    gone = tmp_path / "gone"
    assert (
        refused("check", gone)
        == f"{gone}: there is no such fleet folder; `shedwright begin {gone}` starts one"
    )


def no_permission(name: str):
    """Path.read_bytes that may not read files of this name: permission bits mean nothing to a superuser."""
    real = Path.read_bytes

    def read_bytes(self: Path) -> bytes:
        if self.name == name:
            raise PermissionError(13, "Permission denied", str(self))
        return real(self)

    return mock.patch.object(Path, "read_bytes", read_bytes)


def test_no_permission_to_read_a_table_or_the_settings(tmp_path):
    write_small_fleet(tmp_path)
    with no_permission("tanks.csv"):
        assert told_by_check(tmp_path) == (
            "tanks.csv: came a file that cannot be read (Permission denied); expected a table; "
            "check that it is there and may be read"
        )
    with no_permission("fleet.toml"):
        assert refused("check", tmp_path) == (
            f"{tmp_path}/fleet.toml: cannot be read ([Errno 13] Permission denied: '{tmp_path}/fleet.toml'); "
            "save it as UTF-8 text"
        )


@pytest.mark.skipif(sys.platform != "linux", reason="permission bits hold for a superuser on Linux only")
def test_real_permission_bits_are_told(tmp_path):
    fleet = write_small_fleet(tmp_path / "fleet")
    (fleet / "tanks.csv").chmod(0)
    command = [sys.executable, "-c", "from fleet.cli import main; main()", "check", str(fleet)]
    ran = subprocess.run(command, preexec_fn=heed_permission_bits, capture_output=True, text=True)
    assert (ran.returncode, ran.stderr) == (2, "")
    assert [line.strip() for line in ran.stdout.splitlines()[:3]] == [
        "1 problem:",
        "tanks.csv",
        "came a file that cannot be read (Permission denied); expected a table; check that it is there and may be read",
    ]


def test_duplicate_keys_and_strangers_are_told_together(tmp_path):
    chillers = pd.concat([small_tables()["chillers"], small_tables()["chillers"].iloc[[0]]])
    chillers.iloc[1, chillers.columns.get_loc("site_id")] = "harbor"
    ran = run("check", write_small_fleet(tmp_path, chillers=chillers))
    assert ran.code == 2
    assert [line.strip() for line in ran.out.splitlines()[:4]] == [
        "2 problems:",
        "chillers.csv",
        "row 7, column chiller_id: came 'harbour, CH-1'; expected each site_id, chiller_id once; remove one of the "
        "rows, or correct its key",
        "row 3, column site_id: came 'harbor'; expected a site_id of sites; add it to sites, or correct the spelling",
    ]
