"""Pages from a made-up and from a practised event: figures by hand, tables beside charts, folders whole."""

import re

import numpy as np
import pandas as pd
import pytest
from conftest import Practice, shedwright

from fleet import records
from fleet.errors import FleetError
from fleet.pages import book, event, figures, scale
from fleet.pages.case import Case
from fleet.pages.sheet import clock, environment, number, percent
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
    page = event.event_page(case, book.links("event.html"))
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
    import shutil

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
