"""Revisions of a practice event's settlement, and the reckoning of one site done again by hand from its document."""

import json
import shutil
from decimal import ROUND_HALF_UP, Decimal
from pathlib import Path

import pandas as pd
import pytest
from conftest import Practice, shedwright

from fleet import records, settling
from fleet.audit import audit
from fleet.errors import FleetError
from fleet.reckoning import reckon
from fleet.reckoning_page import reckoning_lines
from fleet.settling import settle_again, settle_event

EVENT = "practice"


@pytest.fixture(scope="module")
def home(practice: Practice, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The practised fleet with two more revisions: a site excused, then a meter corrected."""
    path = tmp_path_factory.mktemp("revisions") / "fleet"
    shutil.copytree(practice.fleet, path)
    text = (path / "fleet.toml").read_text()
    (path / "fleet.toml").write_text(text + '\n[rules.later]\nbased_on = "meter_before_after"\n')
    meters = path / "meters-event.parquet"
    settle_event(path, EVENT, meters, excuse={a_site(path): " a power cut "})
    frame = pd.read_parquet(meters)
    other = f"B-{other_site(path)}"
    late = (frame["meter_id"] == other) & (frame["interval_start"] >= pd.Timestamp("2026-07-15T14:00Z"))
    frame.loc[late & (frame["interval_start"] < pd.Timestamp("2026-07-15T14:30Z")), "kw"] += 8.0
    frame.to_parquet(path / "corrected.parquet")
    settle_event(path, EVENT, path / "corrected.parquet")
    return path


def sites(path: Path, revision: int) -> pd.DataFrame:
    return records.read_settlement(path, EVENT, revision).frames["sites"].set_index("site_id")


def a_site(path: Path) -> str:
    return str(sites(path, 1)["total"].astype(float).idxmax())


def other_site(path: Path) -> str:
    return str(sites(path, 1)["total"].astype(float).nlargest(2).index[1])


def test_an_excused_site_earns_and_owes_nothing_and_stays_excused(home: Path) -> None:
    site = a_site(home)
    for revision in (2, 3):
        row = sites(home, revision).loc[site]
        assert (row["state"], row["why"]) == ("excused", "a power cut")
        assert pd.isna(row["performance_factor"]) and pd.isna(row["paid_share"])
        assert row["total"] == row["penalty"] == Decimal(0)
        assert row["delivered_kwh"] == pytest.approx(sites(home, 1).loc[site, "delivered_kwh"])


def test_postings_are_the_difference_and_the_statement_says_what_changed(home: Path) -> None:
    site, other = a_site(home), other_site(home)
    second = records.read_settlement(home, EVENT, 2)
    posted = second.frames["postings"].set_index("site_id")["amount"]
    assert posted[site] == -sites(home, 1).loc[site, "total"]
    assert (posted.drop(site) == 0).all()
    assert f"excused: {site}: a power cut" in second.statements["statement.txt"]
    third = records.read_settlement(home, EVENT, 3)
    changed = json.loads(third.statements["statement.json"])["changes"]
    assert [entry["site_id"] for entry in changed] == [other]
    # Two quarter hours 8 kW higher: 4 kWh less delivered.
    was, now = changed[0]["columns"]["delivered_kwh"]
    assert was - now == pytest.approx(4.0)
    assert [row["interval_start"] for row in changed[0]["intervals"]] == [
        "2026-07-15T14:00:00Z",
        "2026-07-15T14:15:00Z",
    ]
    was, now = changed[0]["intervals"][0]["metered_kw"]
    assert now - was == pytest.approx(8.0)
    assert f"  {other}: delivered_kwh " in third.statements["statement.txt"]
    amount = third.frames["postings"].set_index("site_id").loc[other, "amount"]
    assert amount == sites(home, 3).loc[other, "total"] - sites(home, 2).loc[other, "total"] < 0


def test_an_old_revision_comes_out_the_same_byte_for_byte(home: Path) -> None:
    meters = home / "meters-event.parquet"
    assert settle_again(home, EVENT, 1, meters) == []
    assert settle_again(home, EVENT, 2, meters) == []
    with pytest.raises(FleetError) as caught:
        settle_again(home, EVENT, 1, home / "corrected.parquet")
    assert str(caught.value) == (
        "event practice, settlement revision 1: was made of other readings (meters-event.parquet, "
        "meters/history-000.parquet, meters/recent.parquet); give back those files, unchanged, to work it out again"
    )


def test_the_rule_is_the_frozen_one_and_the_audit_holds(home: Path) -> None:
    assert set(sites(home, 3)["rule"]) == set(sites(home, 1)["rule"])
    assert audit(home, EVENT).holds


def test_a_site_counts_again_with_a_reason_and_by_whom(home: Path, tmp_path: Path) -> None:
    path = tmp_path / "fleet"
    shutil.copytree(home, path)
    site = a_site(path)
    with pytest.raises(FleetError, match=f"--readmit {site}: no reason is given; say why with --why"):
        settle_event(path, EVENT, path / "corrected.parquet", readmit={site: " "})
    with pytest.raises(FleetError) as caught:
        settle_event(path, EVENT, path / "corrected.parquet", readmit={"castle": "why not"})
    assert str(caught.value) == (
        f"event practice: site castle is not excused, so it cannot be readmitted; excused are {site}"
    )
    again = {site: "the cut was elsewhere"}
    made = settle_event(path, EVENT, path / "corrected.parquet", readmit=again, who="A. Analyst")
    row = sites(path, made.revision).loc[site]
    assert row["state"] == "final" and pd.isna(row["why"])
    assert row["total"] == sites(path, 1).loc[site, "total"]
    texts = records.read_settlement(path, EVENT, made.revision).statements
    inputs = json.loads(texts["inputs.json"])
    assert (inputs["excused"], inputs["readmitted"], inputs["who"]) == ({}, again, "A. Analyst")
    assert f"note: counts again: {site}: the cut was elsewhere, by A. Analyst" in texts["statement.txt"]
    assert settle_again(path, EVENT, made.revision, path / "corrected.parquet") == []
    assert audit(path, EVENT).holds


def test_the_statement_reads_well_in_ninety_columns_and_adds_up(home: Path) -> None:
    text = records.read_settlement(home, EVENT, 3).statements["statement.txt"]
    lines = text.split("\n")
    assert max(map(len, lines)) <= 90
    first = next(at for at, line in enumerate(lines) if line.startswith("site") and "capacity" in line)
    rows = [line.split() for line in lines[first + 1 : first + 2 + len(sites(home, 3))]]
    assert rows[-1][0] == "all"
    for column in range(1, 5):
        amounts = [Decimal(row[column]) for row in rows]
        assert sum(amounts[:-1], Decimal(0)) == amounts[-1]
    assert Decimal(rows[-1][4]) == sum(sites(home, 3)["total"], Decimal(0))


def test_a_rehearsal_below_its_fleet_finds_the_readings_of_its_fleet(home: Path, tmp_path: Path) -> None:
    fleet = tmp_path / "fleet"
    shutil.copytree(home, fleet)
    below = fleet / "rehearsals" / "1"
    below.mkdir(parents=True)
    (fleet / "events").rename(below / "events")
    assert settle_again(below, EVENT, 1, fleet / "meters-event.parquet") == []


BOMB = '<!DOCTYPE x [<!ENTITY a "ha"><!ENTITY b "&a;&a;&a;">]><feed xmlns="http://www.w3.org/2005/Atom">&b;</feed>'
BAD_FILES = {
    "stranger.csv": (
        "meter_id,interval_start,kw\nnobody,2026-07-15T13:00Z,7\n",
        "stranger.csv, row 2, column meter_id: came 'nobody'; expected a meter_id of meter_map; "
        "add it to meter_map, or correct the spelling",
    ),
    "mega.csv": (
        "meter_id,interval_start,mw\nB-hotel-03,2026-07-15T13:00Z,0.7\n",
        "mega.csv, row 1, column mw: came readings in MW; expected kw or kwh; "
        "multiply by 1000 and name the column kw",
    ),
    "bomb.xml": (
        BOMB,
        "bomb.xml: declares a document type, which can hold entities that swell without end; "
        "an interval-data feed needs none: export it again without <!DOCTYPE>",
    ),
    "two.csv": (
        "meter_id,interval_start,kw\nB-hotel-03,2026-07-15T13:00Z,7\nB-hotel-03,2026-07-15T13:00Z,8\n",
        "meters, row 3, column kw: came 8 for meter B-hotel-03 at 2026-07-15T13:00:00.000000Z, where row 2 has 7; "
        "expected one value per meter and interval; find out which one holds and take the other out",
    ),
}


def test_readings_that_cannot_be_used_are_refused_and_nothing_is_written(home: Path, tmp_path: Path) -> None:
    there = sorted(path.name for path in (home / "events" / EVENT).iterdir())
    for name, (text, said) in BAD_FILES.items():
        (tmp_path / name).write_text(text)
        with pytest.raises(FleetError) as caught:
            settle_event(home, EVENT, tmp_path / name)
        assert str(caught.value) == said
    assert sorted(path.name for path in (home / "events" / EVENT).iterdir()) == there


def test_an_excuse_needs_a_called_site_and_a_reason(home: Path) -> None:
    meters = home / "meters-event.parquet"
    with pytest.raises(FleetError, match=r"^--excuse x: no reason is given; say why with --why$"):
        settle_event(home, EVENT, meters, excuse={"x": " "})
    with pytest.raises(FleetError, match=r"^event practice: site x is not called, so it cannot be excused; "):
        settle_event(home, EVENT, meters, excuse={"x": "y"})
    assert records.revisions(home, EVENT, "settlement") == [1, 2, 3]


def test_one_site_worked_out_by_hand_from_its_reckoning(home: Path) -> None:
    """Every step from the document alone: mean of days, factor, intervals, energy, money."""
    site = other_site(home)
    found = reckon(home, EVENT, site, 1)
    mean = {(slot["part"], slot["local_time"]): slot["mean_kw"] for slot in found["slots"]}
    for slot in found["slots"]:
        kw = list(slot["kw_by_day"].values())
        assert slot["mean_kw"] == pytest.approx(sum(kw) / len(kw))
    window = [value for (part, _), value in mean.items() if part == "window"]
    own = found["adjustment"]
    a = own["event_day_window_kw"] - (own["event_day_charging_kw"] or 0.0)
    b = sum(window) / len(window) - (own["used_days_charging_kw"] or 0.0)
    assert own["raw"] == pytest.approx(a / b)
    factor = min(max(a / b, own["cap"][0]), own["cap"][1])
    assert own["applied"] == pytest.approx(factor)
    energy = 0.0
    for row in found["intervals"]:
        base = mean["event", row["local_time"][11:16]]
        assert row["baseline_kw"] == pytest.approx(base)
        assert row["delivered_kw"] == pytest.approx(base * factor - row["metered_kw"])
        energy += row["delivered_kw"] / 4 if row["in_window"] else 0.0
    committed, told = found["energy"]["committed_kwh"], found["money"]
    assert found["energy"]["delivered_kwh"] == pytest.approx(energy)
    share = min(max(energy / committed, 0.0), 1.0)

    def cents(amount: float) -> Decimal:
        return Decimal(f"{amount:.9f}").quantize(Decimal("0.01"), ROUND_HALF_UP)

    due = (
        cents(committed * share * told["capacity_payment_per_kwh"]),
        cents(energy * told["energy_payment_per_kwh"]),
        -cents(max(committed - energy, 0.0) * told["penalty_per_kwh"]),
    )
    assert tuple(Decimal(told[name]) for name in ("capacity_payment", "energy_payment", "penalty")) == due
    assert Decimal(told["total"]) == sum(due) == Decimal(told["posted"])


def test_the_page_holds_the_documents_figures(home: Path) -> None:
    found = reckon(home, EVENT, a_site(home), 2)
    page = "\n".join(reckoning_lines(found))
    assert "excused: a power cut" in page and "factor undefined" in page
    assert f"before the cap {found['adjustment']['raw']:.6f}" in page
    assert f"{found['days'][1]['day']}  yes" in page


def test_the_command_prints_one_document_and_names_the_called(home: Path) -> None:
    told = shedwright("reckon", str(home), EVENT, a_site(home), "--revision", "1", "--json", cwd=home)
    assert json.loads(told.stdout) == reckon(home, EVENT, a_site(home), 1)
    refused = shedwright("reckon", str(home), EVENT, "nobody", cwd=home)
    assert refused.returncode == 2
    assert refused.stderr.startswith(
        "event practice, settlement revision 3: site 'nobody' is not called; called are "
    )


def test_hours_add_up_to_the_energy_and_stand_on_the_page(home: Path) -> None:
    found = reckon(home, EVENT, other_site(home), 1)
    hours, energy = found["hours"], found["energy"]
    for name in ("committed_kwh", "delivered_kwh"):
        assert sum(row[name] for row in hours) == pytest.approx(energy[name])
    assert [row["hour"] for row in hours] == sorted(row["hour"] for row in hours)
    assert all(row["counted_kwh"] == row["delivered_kwh"] for row in hours)
    assert f"   hour {hours[0]['hour']}: committed {hours[0]['committed_kwh']:,.3f} kWh" in "\n".join(
        reckoning_lines(found)
    )


def test_no_room_for_the_days_is_told_and_nothing_is_written(
    home: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(self: object, frame: pd.DataFrame) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(settling.ParquetParts, "add", full)
    before = records.revisions(home, EVENT, "settlement")
    with pytest.raises(FleetError) as caught:
        settle_event(home, EVENT)
    assert str(caught.value).endswith(
        ": readings of the days cannot be put by (No space left on device); nothing was settled; make room, or name "
        "another folder for such files in TMPDIR"
    )
    assert records.revisions(home, EVENT, "settlement") == before
