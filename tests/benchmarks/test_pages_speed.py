"""How long pages take: all pages of a practised 40-site event, and 1,000 order sheets with their calendar files.

Targets on two quiet cores: 5 s and 30 s. The answers are asserted, the seconds printed.
"""

import time

import pytest
import vobject
from conftest import Practice
from made_record import made_call

from fleet import records
from fleet.called import called_sites
from fleet.orders import orders
from fleet.pages import book, diary
from fleet.pages.case import Case
from fleet.pages.order_sheet import sheet_page

pytestmark = pytest.mark.benchmark_run


def test_all_pages_of_an_event(practice: Practice) -> None:
    started, worked = time.perf_counter(), time.process_time()
    files = book.event_files(practice.fleet, "practice")
    took, cpu = time.perf_counter() - started, time.process_time() - worked
    sites = len(Case(records.read_call(practice.fleet, "practice")).site_ids)
    assert sum(name.startswith("orders/") and name.endswith(".html") for name in files) == sites
    assert sum(name.startswith("statements/") for name in files) == sites
    print(
        f"\n{len(files)} files of an event with {sites} called sites: {took:.1f} s, {cpu:.1f} s of processor"
    )


def test_a_thousand_orders() -> None:
    names = [f"site-{number:04d}" for number in range(1000)]
    chillers = [
        {"site_id": name, "chiller_id": unit, "loading_order": turn, "min_off_minutes": 10.0}
        for name in names
        for turn, unit in enumerate(("CH-1", "CH-2"), start=1)
    ]
    windows = [
        {"site_id": name, "quote_id": f"{name}.1", "chiller_ids": ["CH-2"], "inventory_low_start_kwh_th": 0.0}
        for name in names
    ]
    record = made_call(
        facts=[{"site_id": name} for name in names], windows=windows, chillers=chillers, limits={}
    )
    started, worked = time.perf_counter(), time.process_time()
    made = orders(record)
    sheets = [sheet_page(order, [], site) for order, site in zip(made, called_sites(record), strict=True)]
    called_at = record.frames["request"]["called_at"].iloc[0].to_pydatetime()
    calendars = [diary.order_calendar(order, called_at) for order in made]
    took, cpu = time.perf_counter() - started, time.process_time() - worked
    assert len(sheets) == 1000
    assert all(name in sheet and "Stop CH-2" in sheet for name, sheet in zip(names, sheets))
    assert len({vobject.readOne(text).vevent.uid.value for text in calendars}) == 1000
    print(f"\n1,000 order sheets with calendar files: {took:.1f} s, {cpu:.1f} s of processor")
