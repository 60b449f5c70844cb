"""Whole plants through the weather of real places: every strategy, tank kind and layout, usual operation and quotes.

Typical years in pvlib's wheel: Greensboro NC (TMY3 723170), Miami FL (TMY2 12839), Sand Point AK (TMY3 703165).
"""

from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pvlib
import pytest
from made_sites import made_standing
from test_conservation import CASES, every_roster
from test_quote import made_terms

from sites.clock import Clock
from sites.course import Course
from sites.ground import Ground, ground, usual_course
from sites.load import profile_kw_th
from sites.outlook import Outlook
from sites.quote import Quoted, detail, quote
from sites.quotes import LIMITED_BY
from sites.roster import Roster
from sites.weather import wet_bulb_c

DATA = Path(pvlib.__file__).parent / "data"
DESIGN_C = {"Greensboro": 35.6, "Miami": 33.9, "Sand Point": 19.4}
"""Hottest hour of each file."""
HOT = ("Greensboro", pytest.param("Miami", marks=pytest.mark.slow))
SUMMER = (151, 243)
"""June, July, August of a year of 365 days."""


@cache
def year(place: str) -> tuple[np.ndarray, np.ndarray]:
    """Dry bulb and relative humidity of 8,760 hours in standard time."""
    if place == "Miami":
        frame, _ = pvlib.iotools.read_tmy2(str(DATA / "12839.tm2"))
        return frame["DryBulb"].to_numpy() / 10.0, frame["RHum"].to_numpy(dtype=np.float64)
    name = {"Greensboro": "723170TYA.CSV", "Sand Point": "703165TY.csv"}[place]
    frame, _ = pvlib.iotools.read_tmy3(str(DATA / name), map_variables=True, coerce_year=1990)
    return frame["temp_air"].to_numpy(), frame["relative_humidity"].to_numpy(dtype=np.float64)


def outlook_of(roster: Roster, place: str, first_hour: int, hours: int, step_minutes: int) -> Outlook:
    """Hours of a place's year for every site; between the hours on straight lines, loads of an office."""
    dry_year, humid_year = year(place)
    count, n = hours * 60 // step_minutes, roster.count
    at = first_hour + np.arange(count) * step_minutes / 60.0
    dry, humid = (np.interp(at, np.arange(8760.0), values) for values in (dry_year, humid_year))
    hour, day = at % 24.0, (at // 24).astype(np.int64)
    holiday = np.zeros(count, dtype=np.bool_)
    load = profile_kw_th(
        roster.buildings.peak_cooling_kw_th, np.full(n, "office", dtype=object), hour, day % 7, holiday,
        np.tile(dry, (n, 1)), np.full(n, DESIGN_C[place]),
    )  # fmt: skip
    price = np.where((hour >= 22) | (hour < 7), 0.07, 0.19)
    return Outlook(
        Clock(np.datetime64("1990-01-01") + np.timedelta64(first_hour, "h"), step_minutes, count), hour, day % 7, day,
        holiday, np.tile(dry, (n, 1)), np.tile(wet_bulb_c(dry, humid), (n, 1)), load, np.full((n, count), 60.0),
        np.tile(price, (n, 1)), np.full(n, 350.0),
    )  # fmt: skip


def test_the_files_are_those_of_hot_and_cold_places() -> None:
    """Their own hottest hours; degree-hours above 18 degC: 20,958 (Greensboro), 6 (Sand Point)."""
    for place, hottest in DESIGN_C.items():
        assert year(place)[0].max() == pytest.approx(hottest)
    for place, degree_hours in (("Greensboro", 20958.0), ("Sand Point", 6.0)):
        assert np.maximum(year(place)[0] - 18.0, 0.0).sum() == pytest.approx(degree_hours, abs=1.0)
    # Three times the Piedmont's.
    assert np.maximum(year("Miami")[0] - 18.0, 0.0).sum() > 2.5 * 20958.0


@cache
def summer(place: str) -> tuple[Roster, Outlook, Course]:
    roster = every_roster()
    outlook = outlook_of(roster, place, SUMMER[0] * 24, (SUMMER[1] - SUMMER[0]) * 24, 60)
    return roster, outlook, usual_course(roster, outlook, made_standing(roster))


@pytest.mark.parametrize("place", HOT)
def test_every_kind_of_plant_keeps_its_balances_and_limits_through_a_summer(place: str) -> None:
    """2,208 hours, 40 plants: what machines make is served, stored or lost, to 1e-9 of it."""
    roster, outlook, run = summer(place)
    assert np.isfinite(run.power_kw).all()
    made = run.chiller_kw_th.sum(axis=1)
    served = (run.load_kw_th - run.unmet_kw_th).sum(axis=1)
    stored = (run.inventory_kwh_th[:, :, -1] - run.inventory_start_kwh_th[:, :, 0]).sum(axis=1)
    lost = run.loss_kw_th.sum(axis=(1, 2))
    assert (np.abs(made - served - stored - lost) / made).max() < 1e-9
    assert (run.discharge_kw_th <= run.discharge_limit_kw_th + 1e-9).all()
    assert run.inventory_kwh_th.min() >= -1e-9
    assert (run.inventory_kwh_th <= roster.tanks.capacity_kwh_th[:, :, None] + 1e-9).all()
    # Each tank is really used: but chiller priority, all give several times what they hold.
    turned = run.discharge_kw_th.sum(axis=(1, 2)) / 2000.0
    busy = np.array([strategy != "chiller_priority" for strategy, _, _ in CASES])
    assert turned[busy].min() > 10.0
    assert (outlook.wet_bulb_c <= outlook.dry_bulb_c + 1e-9).all()


@pytest.mark.parametrize("place", HOT)
def test_a_summers_power_lies_between_what_the_best_and_worst_hour_allow(place: str) -> None:
    """Air-cooled machines of COP 3.1: the season's lies above ice making's share of it, below mild nights'."""
    _, _, run = summer(place)
    machines = run.machine_kw.sum(axis=(1, 2))
    seasonal = run.chiller_kw_th.sum(axis=1) / machines
    ice = np.array(["ice" in kind for _, kind, _ in CASES])
    assert seasonal.min() > 0.72 * 3.1
    assert seasonal.max() < 1.4 * 3.1
    assert seasonal[~ice].min() > seasonal[ice].min()


def hottest_day(place: str) -> int:
    """Working day of the summer with the highest wet bulb among its five hottest afternoons: a plant's worst."""
    dry, humid = year(place)
    days = np.arange(*SUMMER)
    days = days[days % 7 < 5]
    at_15 = days * 24 + 15
    five = np.argsort(dry[at_15])[-5:]
    return int(days[five[np.argmax(wet_bulb_c(dry[at_15], humid[at_15])[five])]])


@cache
def asked(place: str) -> tuple[Ground, Quoted]:
    """Every plant quoted on its worst day, 16:00 to 19:00, seen from 13:00."""
    roster = every_roster()
    outlook = outlook_of(roster, place, hottest_day(place) * 24 + 13, 35, 15)
    base = ground(roster, outlook, made_standing(roster))
    return base, quote(base, made_terms(roster.count, earliest=np.full(roster.count, 12)))


def best_of(quoted: Quoted) -> np.ndarray:
    """Each quoted site's candidate of most energy."""
    quotes = quoted.quotes
    order = np.lexsort((-quotes.expected_kw.sum(axis=1), quotes.site))
    return order[np.unique(quotes.site[order], return_index=True)[1]]


@pytest.mark.parametrize("place", HOT)
def test_quotes_of_a_worst_day_keep_every_limit_and_the_first_law(place: str) -> None:
    base, quoted = asked(place)
    pick = best_of(quoted)
    # All strategies but full storage, whose machines are off anyway, have something to give.
    quotable = {CASES[site][0] for site in quoted.quotes.site[pick]}
    assert {"chiller_priority", "storage_priority", "load_levelling"} <= quotable
    assert len(pick) >= 20
    run, site, usual = detail(quoted, pick), quoted.quotes.site[pick], base.usual
    zone, step = base.roster.buildings.take(site), 0.25
    chiller = ((run.chiller_kw_th - usual.chiller_kw_th[site]) * step).sum(axis=1)
    stored = (run.inventory_kwh_th - usual.inventory_kwh_th[site])[:, :, -1].sum(axis=1)
    lost = ((run.loss_kw_th - usual.loss_kw_th[site]) * step).sum(axis=(1, 2))
    nodes = zone.air_kwh_per_k * run.air_rise_k[:, -1] + zone.mass_kwh_per_k * run.mass_rise_k[:, -1]
    walls = zone.envelope_kw_per_k * (run.air_mean_rise_k * step).sum(axis=1)
    scale = (run.chiller_kw_th * step).sum(axis=1)
    assert (np.abs(chiller - (stored + lost - nodes - walls)) / scale).max() < 1e-9
    assert (run.discharge_kw_th <= run.discharge_limit_kw_th + 1e-9).all()
    occupied = base.here.occupied[site]
    assert np.where(occupied, run.air_rise_k, 0.0).max() <= 2.0
    assert quoted.quotes.expected_kw[pick].sum(axis=1).min() > 0.0


def test_a_machine_that_stays_on_in_a_window_never_comes_near_its_least_load_or_flow() -> None:
    """It carries load first and the tank what is left: its demand limit, 0.5 at least, is what it runs at."""
    base, quoted = asked("Greensboro")
    quotes = quoted.quotes
    pick = np.arange(0, len(quotes.site), 10)
    run, site = detail(quoted, pick), quotes.site[pick]
    hour = np.arange(run.power_kw.shape[1])[None, :]
    inside = (hour >= quotes.window_start[pick][:, None]) & (hour < quotes.window_end[pick][:, None])
    on = (run.direct_kw_th > 0.0) & inside[:, None, :]
    share = run.direct_kw_th[on] / base.here.direct_kw_th[site][on]
    assert on.sum() > 200
    assert share.min() >= 0.5 - 1e-9


@pytest.mark.parametrize("place", HOT)
def test_no_plant_is_quoted_more_than_it_draws(place: str) -> None:
    base, quoted = asked(place)
    quotes = quoted.quotes
    usual = base.usual.power_kw[quotes.site][:, quotes.event_from : quotes.event_to]
    assert (quotes.expected_kw <= usual + 1e-9).all()


def test_full_storage_on_an_ordinary_summer_day_has_its_machines_off_and_nothing_to_give() -> None:
    """Greensboro, the coolest working day of June to August at 15:00 above 20 degC, tanks of 4,000 kWh_th."""
    every = every_roster()
    roster = every.take(
        np.array([row for row, (strategy, _, _) in enumerate(CASES) if strategy == "full_storage"])
    )
    roster = replace(roster, tanks=replace(roster.tanks, capacity_kwh_th=2.0 * roster.tanks.capacity_kwh_th))
    days = np.arange(*SUMMER)
    days = days[(days % 7 < 5) & (year("Greensboro")[0][days * 24 + 15] > 20.0)]
    day = int(days[np.argmin(year("Greensboro")[0][days * 24 + 15])])
    base = ground(roster, outlook_of(roster, "Greensboro", day * 24 + 13, 35, 15), made_standing(roster))
    quoted = quote(base, made_terms(roster.count, earliest=np.full(roster.count, 12)))
    off = base.usual.chiller_kw_th[:, 12:24].max(axis=1) == 0.0
    assert off.sum() >= 4
    assert not off[quoted.quotes.site].any()
    limits = np.array([LIMITED_BY[code] for code in quoted.quotes.site_limited_by])
    assert (limits[off] == "already_off").all()


def test_a_place_that_needs_no_cooling_is_quoted_no_shed_and_told_why() -> None:
    """Sand Point, its hottest day, outdoor air cooling the buildings below 20 degC: no load, nothing to give."""
    roster = every_roster()
    day = int(np.argmax(year("Sand Point")[0])) // 24
    outlook = outlook_of(roster, "Sand Point", day * 24 + 13, 35, 15)
    share = np.clip((outlook.dry_bulb_c - 20.0) / (35.0 - 20.0), 0.0, None)
    outlook = replace(outlook, cooling_load_kw_th=roster.buildings.peak_cooling_kw_th[:, None] * share)
    base = ground(roster, outlook, made_standing(roster))
    quoted = quote(base, made_terms(roster.count, earliest=np.full(roster.count, 12)))
    assert base.usual.direct_kw_th.max() == 0.0
    assert len(quoted.quotes.site) == 0
    assert {LIMITED_BY[code] for code in quoted.quotes.site_limited_by} == {"already_off"}
