"""One site's quote line by line, as an engineer would check it by hand.

Owns the choice of lines and their wording. Every figure is the simulation's own, at the first interval of the site's
window of most energy, or of the event where it has none.
"""

from collections.abc import Iterator

import numpy as np

from fleet.desk import Survey
from fleet.errors import FleetError
from fleet.quote_text import LIMIT_WORDS, machines_off, money
from fleet.quoting import Offer
from fleet.wall_time import local_text
from sites.course import Course
from sites.direction import Direction
from sites.quote import detail
from sites.quotes import COST_PARTS, LIMITED_BY
from sites.units import KW_TH_PER_TON


def site_lines(survey: Survey, offer: Offer, site_id: str, tons: bool) -> list[str]:
    """The lines of one site; FleetError for a site that the fleet does not have."""
    found = np.flatnonzero(survey.fleet.roster.buildings.site_id == site_id)
    if not len(found):
        raise FleetError(
            f"--site {site_id}: the fleet has no such site; `shedwright quote` without it lists them"
        )
    i = int(found[0])
    c, quotes = int(offer.best[i]), survey.quoted.quotes
    reason = LIMIT_WORDS[LIMITED_BY[int(quotes.site_limited_by[i])]]
    usual, cold = survey.quoted.ground.usual, _Cold(tons)
    if c < 0:
        t = quotes.event_from
        lines = [
            f"{site_id}  nothing to give from {_clock(survey, t)} to {_clock(survey, quotes.event_to)}",
            _load(survey, i, t, cold),
            *_case("usual", survey, usual, (i, i), t, cold),
        ]
        return [*lines, f"  {'limit':<10}{survey.eligible.reason.get(site_id) or reason}"]
    start, end = int(quotes.window_start[c]), int(quotes.window_end[c])
    event = detail(survey.quoted, np.array([c]))
    off, limit = machines_off(survey, c), float(survey.quoted.load_limit_fraction[c])
    what = f"off: {' '.join(off)}" if off else "tanks made to charge"
    rest = "" if limit == 1.0 else f", machines that run held to {limit:.0%}"
    return [
        f"{site_id}  {_clock(survey, start)} to {_clock(survey, end)}, {what}{rest}",
        _load(survey, i, start, cold),
        *_case("usual", survey, usual, (i, i), start, cold),
        *_case("event", survey, event, (i, 0), start, cold),
        *_shed(survey, c, usual, event),
        *_tank(survey, c, event, cold),
        f"  {'rooms':<10}at most {survey.quoted.peak_rise_k[c]:.2f} K warmer than usual",
        *_cost(survey, c),
        f"  {'limit':<10}{reason}",
    ]


class _Cold:
    """Cooling in the unit that is asked for."""

    def __init__(self, tons: bool) -> None:
        self.size = KW_TH_PER_TON if tons else 1.0
        self.kw, self.kwh = ("tons", "ton-h") if tons else ("kW_th", "kWh_th")

    def rate(self, kw_th: float) -> str:
        return f"{kw_th / self.size:,.1f} {self.kw}"

    def amount(self, kwh_th: float) -> str:
        return f"{kwh_th / self.size:,.1f} {self.kwh}"


def _clock(survey: Survey, index: int) -> str:
    clock = survey.quoted.quotes.clock
    return local_text(clock.start + index * clock.step, survey.folder.settings.timezone)[:16]


def _load(survey: Survey, i: int, t: int, cold: _Cold) -> str:
    outlook = survey.fleet.outlook
    return (
        f"  {'load':<10}{cold.rate(outlook.cooling_load_kw_th[i, t])} at {_clock(survey, t)[11:]}, dry bulb "
        f"{outlook.dry_bulb_c[i, t]:.1f}, wet bulb {outlook.wet_bulb_c[i, t]:.1f} degC"
    )


def _case(
    name: str, survey: Survey, course: Course, place: tuple[int, int], t: int, cold: _Cold
) -> Iterator[str]:
    """Machines, tank and pumps in interval t; `place` is the site's index and its row in `course`."""
    i, row = place
    chillers, here = survey.fleet.roster.chillers, survey.quoted.ground.here
    head = name
    for m in np.flatnonzero(chillers.exists[i]):
        given = course.direct_kw_th[row, m, t] + course.into_tank_kw_th[row, m, t]
        if given > 0.0:
            ice = bool(course.making_ice[row, m, t])
            able = (here.ice_kw_th if ice else here.direct_kw_th)[i, m, t]
            what = " making ice" if ice else ""
            yield (
                f"  {head:<10}{chillers.chiller_id[i, m]} gives {cold.rate(given)} of {cold.rate(able)}{what}, "
                f"draws {course.machine_kw[row, m, t]:,.1f} kW"
            )
            head = ""
    drawn = course.discharge_kw_th[row, :, t].sum()
    if survey.fleet.roster.tanks.exists[i].any():
        most = course.discharge_limit_kw_th[row, :, t].sum()
        level = course.inventory_kwh_th[row, :, t].sum()
        yield (
            f"  {head:<10}tank gives {cold.rate(drawn)}; it can give {cold.rate(most)} at the {cold.amount(level)} "
            "it ends with"
        )
        head = ""
    if course.unmet_kw_th[row, t] > 0.0:
        yield f"  {head:<10}{cold.rate(course.unmet_kw_th[row, t])} go unmet"
        head = ""
    machines, power = course.machine_kw[row, :, t].sum(), course.power_kw[row, t]
    yield f"  {head:<10}pumps draw {power - machines:,.1f} kW; the plant {power:,.1f} kW"


def _shed(survey: Survey, c: int, usual: Course, event: Course) -> Iterator[str]:
    quotes = survey.quoted.quotes
    i, start, end = int(quotes.site[c]), int(quotes.window_start[c]), int(quotes.window_end[c])
    inside = quotes.expected_kw[c, start - quotes.event_from : end - quotes.event_from]
    hours = (end - start) * quotes.clock.step_h
    both = usual.power_kw[i, start], event.power_kw[0, start]
    more, less = both if quotes.direction is Direction.SHED else both[::-1]
    yield (
        f"  {quotes.direction:<10}{more:,.1f} - {less:,.1f} = {inside[0]:,.1f} kW at "
        f"first; {inside.min():,.1f} kW at least, {inside.mean():,.1f} kW mean x {hours:g} h = "
        f"{inside.sum() * quotes.clock.step_h:,.1f} kWh"
    )


def _tank(survey: Survey, c: int, event: Course, cold: _Cold) -> Iterator[str]:
    quotes = survey.quoted.quotes
    i, start, end = int(quotes.site[c]), int(quotes.window_start[c]), int(quotes.window_end[c])
    if not survey.fleet.roster.tanks.exists[i].any():
        return
    span, step_h = slice(start, end), quotes.clock.step_h
    before = event.inventory_start_kwh_th[0, :, start].sum()
    given, lost, taken = (
        values[0, :, span].sum() * step_h
        for values in (event.discharge_kw_th, event.loss_kw_th, event.charge_kw_th)
    )
    charged = f"+ {cold.amount(taken)} charged " if taken > 0.0 else ""
    yield (
        f"  {'tank':<10}{cold.amount(before)} at the start - {cold.amount(given)} given - {cold.amount(lost)} lost "
        f"{charged}"
        f"= {cold.amount(event.inventory_kwh_th[0, :, end - 1].sum())} at the end"
    )
    again = int(survey.quoted.full_again[c])
    when = f"at {_clock(survey, again + 1)}" if again >= 0 else "not within the horizon"
    yield f"  {'':<10}back at its usual level {when}"


def _cost(survey: Survey, c: int) -> Iterator[str]:
    quotes = survey.quoted.quotes
    start, end = int(quotes.window_start[c]), int(quotes.window_end[c])
    after = quotes.change_kw[c, end:].sum() * quotes.clock.step_h
    shed = (
        quotes.expected_kw[c, start - quotes.event_from : end - quotes.event_from].sum() * quotes.clock.step_h
    )
    parts = ", ".join(f"{name} {value:,.2f}" for name, value in zip(COST_PARTS, quotes.cost[c], strict=True))
    net = float(quotes.net_cost[c])
    yield f"  {'recovery':<10}{after:,.1f} kWh more than usual after the window"
    yield f"  {'cost':<10}{parts}"
    whole = quotes.expected_kw[c].sum() * quotes.clock.step_h
    back = (
        f" ({net / whole:,.3f} less what comes back within the event)" if shed - whole > 0.05 < whole else ""
    )
    yield f"  {'':<10}together {money(net, survey)}, {net / shed:,.3f} per kWh{back}"
