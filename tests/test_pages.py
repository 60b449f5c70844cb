"""Pages from a made-up and from a practised event: figures by hand, tables beside charts, folders whole."""

import csv
import io
import re
import shutil
from dataclasses import replace
from decimal import Decimal
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from commands import run
from conftest import Practice, shedwright

from fleet import records
from fleet.errors import FleetError
from fleet.pages import balance, book, diary, event, figures, scale, season
from fleet.pages.case import Case
from fleet.pages.sheet import clock, environment, number, percent
from fleet.schema import tables
from fleet.tables import read_parquet, write_parquet
from sites.units import Floats

HOUR = np.timedelta64(3600_000_000, "us")
NOON = np.datetime64("2026-07-15T09:00", "us")


@pytest.fixture(scope="module")
def case(practice: Practice) -> Case:
    return Case(records.read_call(practice.fleet, "practice"))


def chart(values: Floats, **changes: object) -> figures.Chart:
    given = {
        "title": "T",
        "said": "S.",
        "unit": "kW",
        "edges": NOON + np.arange(len(values) + 1) * HOUR,
        "zone": "Europe/Athens",
        "series": [figures.Series("x", "usual", values)],
    }
    return figures.Chart(**(given | changes))  # type: ignore[arg-type]


def test_ticks_are_round_and_hold_the_values():
    for low, high in ((0.0, 7657.3), (-12.0, 3.0), (0.0, 0.004), (5.0, 5.0), (0.0, 1e9)):
        ticks = scale.round_ticks(low, high)
        assert ticks[0] <= low + 1e-9
        assert ticks[-1] >= high - 1e-9
        assert 2 <= len(ticks) <= 8
        assert np.allclose(np.diff(ticks), np.diff(ticks)[0])


def test_hours_are_local_and_skip_none_on_a_day_of_25_hours():
    """2026-10-25 in Athens has 25 h: midnight to midnight is 21:00 to 22:00 UTC the day after."""
    ticks = scale.hour_ticks(
        np.datetime64("2026-10-24T21:00", "us"), np.datetime64("2026-10-25T22:00", "us"), "Europe/Athens"
    )
    assert [tick.hour for tick, _ in ticks] == [0, 3, 3, 6, 9, 12, 15, 18, 21, 0]
    assert [day for _, day in ticks] == [True, *[False] * 8, True]


def test_steps_rise_where_an_interval_starts_and_lift_the_pen_over_a_gap():
    path = figures.step_path(np.array([0.0, 1.0, 2.0, 3.0]), np.array([5.0, 7.0, np.nan]))
    assert path == "M0.0 5.0H1.0V7.0H2.0"
    assert (
        figures.step_path(np.array([0.0, 1.0, 2.0, 3.0]), np.array([5.0, np.nan, 6.0]))
        == "M0.0 5.0H1.0M2.0 6.0H3.0"
    )


def test_a_charts_table_holds_every_value_at_its_local_time():
    heads, rows = figures.numbers(chart(np.array([1234.56, np.nan])))
    assert heads == ["time", "x, kW"]
    assert rows == [["Wed 12:00", "1,234.6"], ["Wed 13:00", "–"]]


def test_a_chart_names_itself_and_draws_where_the_values_are():
    svg = str(figures.chart_svg(chart(np.array([0.0, 100.0]), shaded=(NOON, NOON + HOUR))))
    assert 'role="img" aria-label="T. S."' in svg
    path = re.search(r'class="s usual" d="([^"]+)"', svg)
    assert path is not None
    base, top = figures.HEIGHT - figures.BOTTOM, figures.TOP
    assert path[1].startswith(f"M{figures.LEFT:.1f} {base:.1f}H")
    assert path[1].endswith(f"V{top:.1f}H{figures.WIDTH - figures.RIGHT:.1f}")


def test_hostile_names_in_a_chart_are_text():
    svg = str(figures.chart_svg(chart(np.ones(2), title='"><script>', unit="<b>")))
    assert "<script" not in svg
    assert "<b>" not in svg


def test_numbers_are_written_with_thousands_and_no_minus_before_zero():
    assert [
        number(v, d) for v, d in ((1234567.8, 0), (-0.001, 2), (None, 0), (float("nan"), 1), (-3.14, 1))
    ] == [
        "1,234,568",
        "0.00",
        "–",
        "–",
        "−3.1",
    ]
    assert percent(0.1234, 1) == "12.3 %"
    at = pd.Timestamp("2026-07-15 22:30", tz="UTC")
    assert clock(at, "Europe/Athens", pd.Timestamp("2026-07-15 12:00", tz="UTC")) == "Thu 01:30"
    assert clock(pd.NaT, "Europe/Athens") == "–"


def test_the_event_page_tells_what_the_record_holds(practice: Practice, case: Case):
    page = event.event_page(case, book.links("event.html", ["event.html"]))
    windows = pd.read_parquet(case.record.path / "windows.parquet")
    assert f"{windows['committed_kwh'].sum():,.0f}" in page
    assert f"{case.request['requested_kw'].max():,.0f} kW" in page
    assert f"{case.request['expected_kw'].min():,.0f} kW" in page
    for site in windows["site_id"]:
        assert f"<bdi>{site}</bdi>" in page
    usual = case.course("usual_kw").sum(axis=0)
    assert f"Usual peak {usual.max():,.0f} kW" in page
    assert f"{number(case.record.proof['gap_money'], 2)} EUR" in page
    assert "No feeder is over its limit" in page
    assert page.count("<figure>") == page.count("<summary>Numbers of")


def test_standby_sites_hang_below_the_node_and_are_not_called(practice: Practice, case: Case):
    sites = pd.read_parquet(case.record.path / "frozen" / "sites.parquet").set_index("site_id")
    under = {site for site, node in sites["node_id"].items() if str(node).startswith("N")}
    told = {re.sub("<[^>]+>", "", str(row[0])) for row in event._standby(case).rows if len(row) > 1}
    assert told
    assert told <= under - set(case.site_ids)
    assert set(case.sites_under) == under


def test_worst_feeder_by_hand(case: Case):
    nodes = pd.read_parquet(case.record.path / "nodes.parquet")
    share = ((nodes["event_kw"] + nodes["other_kw"]) / nodes["import_limit_kw"]).max()
    assert f"{100 * share:.1f} %" in event._worst(case)


def test_prices_lie_on_the_horizon_as_the_tariffs_say(case: Case):
    tariffs = pd.read_parquet(case.record.path / "frozen" / "tariffs.parquet").set_index(
        ["tariff_id", "interval_start"]
    )
    sites = pd.read_parquet(case.record.path / "frozen" / "sites.parquet").set_index("site_id")
    for row in (0, 7):
        own = sites["tariff_id"][case.site_ids[row]]
        for place in (0, 5, 77):
            hour = pd.Timestamp(case.edges[place], tz="UTC").floor("h")
            assert case.prices[row, place] == tariffs["price_per_kwh"][(own, hour)]


def test_rehearsing_names_the_index_and_pages_are_made_again_the_same(practice: Practice, tmp_path):
    index = practice.folder / practice.told["pages"]["index"]
    assert index.is_file()
    before = {path: path.read_bytes() for path in index.parent.rglob("*") if path.is_file()}
    assert len(before) == len(practice.told["pages"]["files"])
    ran = shedwright("pages", "rehearsal", "practice", cwd=practice.folder)
    assert ran.returncode == 0, ran.stderr
    assert "start at rehearsal/pages/index.html" in ran.stdout
    assert {path: path.read_bytes() for path in index.parent.rglob("*") if path.is_file()} == before


def test_every_link_leads_to_a_file(practice: Practice):
    folder = practice.fleet / "pages"
    pages = sorted(folder.rglob("*.html"))
    assert len(pages) > 20
    for page in pages:
        for href in re.findall(r'href="([^"#]+)"', page.read_text(encoding="utf-8")):
            assert (page.parent / href).is_file(), f"{page.name}: {href}"


def test_every_page_is_one_file_with_no_script_and_no_address(practice: Practice):
    for page in (practice.fleet / "pages").rglob("*.html"):
        text = page.read_text(encoding="utf-8")
        assert "<script" not in text
        assert not re.search(r"(?:https?:)?//\w", text.replace("<!DOCTYPE", "")), page.name
        assert "default-src 'none'" in text
        assert 'lang="en"' in text
        assert len(text) < 2_000_000


def test_an_event_that_is_not_there_is_named(practice: Practice):
    with pytest.raises(FleetError, match="no event 'practise'; nearest of"):
        book.event_files(practice.fleet, "practise")


def test_what_a_killed_run_left_is_swept_and_the_folder_stays_whole(practice: Practice, tmp_path):
    home = tmp_path / "fleet"
    shutil.copytree(practice.fleet / "events", home / "events")
    (home / "pages" / ".making-practice-0000").mkdir(parents=True)
    (home / "pages" / ".making-practice-0000" / "event.html").write_text("half")
    written = book.write(home)
    assert not list((home / "pages").glob(".making-*"))
    assert all((written.path / name).is_file() for name in written.files)


def test_a_template_that_asks_for_an_unknown_name_is_an_error():
    import jinja2

    with pytest.raises(jinja2.UndefinedError):
        environment().from_string("{{ nobody_said_this }}").render()


def test_cooling_closes_to_zero_at_every_site_and_by_hand(case: Case):
    cold = balance.cooling(case)
    assert np.abs(cold.left_over).max() < 1e-6 * cold.not_made.max()
    assert cold.not_made.min() > 0.0
    assert np.abs(cold.never_came_in).max() > 1.0
    assert np.abs(cold.left_in_tank).max() > 1.0
    frame = case.record.frames["intervals"]
    own = frame[frame["site_id"] == case.site_ids[7]]
    made = own["direct_kw_th"] + own["charge_kw_th"]
    less = (own["usual_chiller_kw_th"] - made) * 0.25
    assert cold.not_made[7] == pytest.approx(less[less > 0].sum())
    assert cold.made_later[7] == pytest.approx(-less[less < 0].sum())


def test_a_record_whose_cooling_does_not_close_has_no_page(practice: Practice):
    record = records.read_call(practice.fleet, "practice")
    broken = record.frames["intervals"].copy()
    broken.loc[3, "charge_kw_th"] += 40.0
    torn = replace(record, frames={**record.frames, "intervals": broken})
    with pytest.raises(FleetError, match=r"the cooling of site .* does not close by -10.000 kWh_th"):
        balance.cooling(Case(torn))


def test_electricity_and_its_prices_by_hand(case: Case):
    told = balance.electricity(case)
    change = (case.course("event_kw") - case.course("usual_kw"))[7] * 0.25
    assert told.not_drawn[7] == pytest.approx(-change[change < 0].sum())
    assert told.drawn_more[7] == pytest.approx(change[change > 0].sum())
    paid = (change * case.prices[7])[change > 0].sum()
    assert told.price_drawn_more[7] * told.drawn_more[7] == pytest.approx(paid)
    _, less, more = balance.by_hour(case)
    assert less.sum() == pytest.approx(told.not_drawn.sum())
    assert more.sum() == pytest.approx(told.drawn_more.sum())


def test_a_peak_without_staggering_is_never_below_the_planned_one(case: Case):
    for rows in (None, [0], [1, 2, 3], case.by_feeder[sorted(case.by_feeder)[0]]):
        back = balance.comeback(case, rows)
        assert back.together_kw >= back.planned_kw - 1e-9 > 0.0
    one = balance.comeback(case, [4])
    assert one.planned_kw == pytest.approx(one.together_kw)


def test_the_statements_say_each_amount_to_the_cent(practice: Practice, case: Case):
    folder = practice.fleet / "pages" / "practice"
    sites = pd.read_parquet(practice.fleet / "events" / "practice" / "settlement-001" / "sites.parquet")
    page = (folder / "statement.html").read_text(encoding="utf-8")
    assert f"{sum(sites['total']):,.2f} EUR" in page
    own = sorted((folder / "statements").glob("*.html"))
    assert len(own) == len(sites)
    for row in sites.sort_values("site_id").itertuples():
        text = next(path for path in own if path.stem[4:] == row.site_id).read_text(encoding="utf-8")
        assert f"{row.total:,.2f} EUR".replace("-", "−") in text
        assert f'<td class="n">{row.capacity_payment:,.2f}</td>' in text
    assert "estimated" in page or "missing" in page
    assert page.count("not all measured") > 0


def test_a_second_settlement_shows_what_it_changed(practice: Practice, tmp_path: Path):
    shutil.copytree(practice.fleet, tmp_path / "rehearsal")
    ran = shedwright(
        "settle", "rehearsal", "practice", "--meter", "rehearsal/meters-event.parquet", "--excuse", "hotel-03",
        "--why", "a pump <b>failed</b>", cwd=tmp_path,
    )  # fmt: skip
    assert ran.returncode == 0, ran.stderr
    files = book.event_files(tmp_path / "rehearsal", "practice")
    page = files["statement.html"]
    assert "settlement revision 2" in page
    assert "What the newest changed" in page
    assert page.count('<tr><th scope="row" class="w">') >= 2
    own = next(
        text for name, text in files.items() if name.endswith("hotel-03.html") and "statements" in name
    )
    assert "Excused: a pump &lt;b&gt;failed&lt;/b&gt;" in own
    assert "excused" in own


def test_the_offer_tells_what_quote_tells(practice: Practice):
    page = (practice.fleet / "pages" / "offer.html").read_text(encoding="utf-8")
    assert f"{practice.told['sustained_kw']:,.0f} kW" in page
    assert "so the request can be met" in page
    assert "kW against duration" in page
    assert "Merit order" in page
    merit = re.findall(
        r"<td class=\"n\">(−?[\d.]+)</td></tr>",
        page.split("Numbers of “Merit order”</summary>")[1].split("</details>")[0],
    )
    costs = [float(cost.replace("−", "-")) for cost in merit]
    assert len(costs) > 10
    assert costs == sorted(costs)


def season_of(*events: tuple[str, str, str, float, float]) -> season.Season:
    """A season of one site: (event, purpose, day, committed, delivered), each 16:00 to 18:00 in Athens."""
    starts = [
        pd.Timestamp(f"{day}T16:00", tz="Europe/Athens").tz_convert("UTC") for _, _, day, _, _ in events
    ]
    base = {"direction": "shed", "node_id": "North", "hours": 2.0, "net_cost": -5.0, "gap": 0.001, "sites": 1}
    told = pd.DataFrame(
        [
            base
            | {
                "event_id": event,
                "purpose": purpose,
                "start": start,
                "asked_kwh": 100.0,
                "expected_kwh": 110.0,
            }
            | {
                "committed_kwh": committed,
                "delivered_kwh": delivered,
                "paid": Decimal("12.5"),
                "call": "call-001",
            }
            | {"settlement": "settlement-001", "seal": "0" * 12}
            for (event, purpose, _, committed, delivered), start in zip(events, starts)
        ]
    )
    calls = pd.DataFrame(
        [
            {
                "event_id": event,
                "purpose": purpose,
                "site_id": '=cmd("x")',
                "window_start": start,
                "hours": 2.0,
            }
            | {
                "rise_k": 0.5 + place,
                "notice_times": 1.0 + place,
                "committed_kwh": committed,
                "delivered_kwh": delivered,
            }
            for place, ((event, purpose, _, committed, delivered), start) in enumerate(zip(events, starts))
        ]
    )
    return season.Season("Europe/Athens", "EUR", told, calls)


def test_a_seasons_fatigue_by_hand():
    made = season_of(
        ("a", "real", "2026-07-14", 100.0, 80.0),
        ("b", "test", "2026-07-15", 100.0, 90.0),
        ("c", "real", "2026-07-17", 100.0, float("nan")),
        ("d", "rehearsal", "2026-07-16", 100.0, 10.0),
    )
    row = season.fatigue(made.counted).iloc[0]
    assert (row["calls"], row["hours"], row["rise_k"], row["short"], row["run_days"]) == (3, 6.0, 2.5, 1, 2)
    assert row["delivered_kwh"] / row["settled_kwh"] == pytest.approx(0.85)
    page = season.season_page(made)
    assert "85 %" in page
    assert "=cmd(&#34;x&#34;)" in page
    assert "rehearsals, which count" not in page


def test_the_regulators_table_is_csv_that_no_spreadsheet_works_out():
    made = season_of(("a", "real", "2026-07-14", 100.0, 80.0))
    made.events["node_id"] = '=HYPERLINK("x"),\n"'
    text = season.season_csv(made)
    head, row = list(csv.reader(io.StringIO(text, newline="")))
    assert dict(zip(head, row))["node"] == '\'=HYPERLINK("x"),\\x0a"'
    assert dict(zip(head, row))["paid_EUR"] == "12.50"
    assert dict(zip(head, row))["call"] == "events/a/call-001"


@pytest.mark.parametrize(("days", "longest"), [([], 0), ([1], 1), ([1, 2, 3, 7], 3), ([1, 1, 3, 4], 2)])
def test_days_on_end(days: list[int], longest: int):
    assert (
        season.longest_run(pd.Series([pd.Timestamp(2026, 7, day) for day in days], dtype="datetime64[ns]"))
        == longest
    )


def test_offer_options_go_together():
    told = [
        run("pages", "nowhere", "--from", "2026-07-14T16:00"),
        run("pages", "nowhere", "EV", "--from", "2026-07-14T16:00", "--to", "2026-07-14T17:00"),
    ]
    assert [ran.code for ran in told] == [2, 2]
    assert "--from and --to go together" in told[0].err
    assert "an offer is made before a call" in told[1].err


def test_a_plan_without_a_site_withdraws_its_order_and_raises_the_others(practice: Practice, tmp_path: Path):
    """Call revision 2 as revision 1 less one site: its calendar entry is cancelled, the others are changed."""
    first = book.event_files(practice.fleet, "practice")
    shutil.copytree(practice.fleet / "events", tmp_path / "events")
    folder = tmp_path / "events" / "practice"
    shutil.copytree(folder / "call-001", folder / "call-002")
    gone = "hotel-03"
    for frame_of, of in tables("call").items():
        path = folder / "call-002" / f"{frame_of}.parquet"
        frame = read_parquet(path, of)
        if "site_id" in frame and frame_of not in ("usual", "quotes"):
            frame = frame[frame["site_id"] != gone]
        if frame_of == "request":
            frame["supersedes"] = pd.array([1] * len(frame), dtype="Int64")
        path.unlink()
        write_parquet(frame, path, of)
    second = book.event_files(tmp_path, "practice")
    cancelled = [name for name in second if "withdrawn" in name]
    assert len(cancelled) == 1
    assert "STATUS:CANCELLED" in second[cancelled[0]]
    assert "SEQUENCE:1" in second[cancelled[0]]
    uid = diary.uid("practice", gone)
    before = next(text for name, text in first.items() if name.endswith(f"{gone}.ics"))
    assert f"UID:{uid}" in before
    assert f"UID:{uid}" in second[cancelled[0]]
    kept = next(text for name, text in second.items() if name.endswith("office-01.ics"))
    assert "SEQUENCE:1" in kept
    assert "STATUS:CONFIRMED" in kept
    assert "withdrawn" in second["orders.html"]
    assert "replaces revision 1" in next(
        text for name, text in second.items() if name.endswith("office-01.html")
    )
