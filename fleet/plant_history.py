"""What plant meters of past days say of a fleet: its loads, its tanks' levels, and each plant's efficiency.

Owns the order, and the efficiency. The comparison is that of sites/past.py; a given load table always wins. Readings
that cannot be used leave the fleet as it is, with a note.
"""

from dataclasses import replace
from typing import Final

import numpy as np
import pandas as pd

from fleet.assemble import Fleet
from fleet.errors import FleetError, Refused
from fleet.folder import FleetFolder
from fleet.level_history import with_levels
from fleet.load_history import with_fitted_loads
from fleet.past_days import LEAST_DAYS, SETTLING_DAYS, Past, filled, read_past, resting
from fleet.resolve import Assumption
from sites.ground import usual_course
from sites.past import YARDSTICK_CV, Match, compare, compressor_kw
from sites.units import Floats, Ints, Strings

LEAST_COVER: Final = 0.98
"""Share of the past that the load table covers; gaps hold the site's mean and are not compared."""


def with_history(folder: FleetFolder, fleet: Fleet, busy: pd.DataFrame) -> Fleet:
    """The fleet with loads and efficiencies that its plant meters' past says; `busy` are past windows of calls."""
    try:
        past = read_past(folder, fleet, busy)
    except (Refused, FleetError) as error:
        note = f"plant meters' past is not used: {error}".split("\n")[0]
        return replace(fleet, notes=(*fleet.notes, note))
    if past is None:
        return fleet
    fitted = with_fitted_loads(folder, fleet, past.whole_days)
    levelled = with_levels(folder, fitted, past)
    return _with_efficiency(levelled, past.whole_days)


def _with_efficiency(fleet: Fleet, past: Past) -> Fleet:
    """Machines' COP corrected where usual operation, run over the past with its load table, is off its meter."""
    match, rows = _match(fleet, past)
    if not len(rows):
        return fleet
    factor = np.ones(fleet.roster.count)
    factor[past.site[rows]] = match.efficiency
    chillers = fleet.resolved["chillers"].copy()
    by_site = pd.Series(factor, index=fleet.roster.buildings.site_id)
    chillers["rated_cop"] = chillers["rated_cop"] * by_site.reindex(chillers["site_id"]).to_numpy()
    machines = replace(fleet.roster.chillers, rated_cop=fleet.roster.chillers.rated_cop * factor[:, None])
    names = fleet.roster.buildings.site_id[past.site[rows]]
    return replace(
        fleet,
        roster=replace(fleet.roster, chillers=machines),
        resolved=fleet.resolved | {"chillers": chillers},
        assumed=(*fleet.assumed, *_efficiency_assumptions(names, match)),
        notes=(*fleet.notes, *_match_notes(names, match)),
    )


def _match(fleet: Fleet, past: Past) -> tuple[Match, Ints]:
    """Usual operation beside the meters, and which rows of the past it is of: those with loads and days enough."""
    per_day = 1440 // past.clock.step_minutes
    load = past.outlook.cooling_load_kw_th
    metered = np.where(np.isfinite(load) & past.weather_known, past.kw, np.nan)
    enough = np.isfinite(metered[:, SETTLING_DAYS * per_day :]).sum(axis=1) >= LEAST_DAYS * per_day
    rows = np.flatnonzero(enough & (np.isfinite(load).mean(axis=1) > LEAST_COVER))
    if not len(rows):
        none = np.zeros((0, 1))
        return compare(none, none, none, 1.0), rows
    usual_kw, compressors_kw = _usual_kw(fleet, past, rows, per_day)
    metered = metered[rows, SETTLING_DAYS * per_day :]
    return compare(usual_kw, compressors_kw, metered, past.clock.step_minutes / 60.0), rows


def _usual_kw(fleet: Fleet, past: Past, rows: Ints, per_day: int) -> tuple[Floats, Floats]:
    """Usual plant power and its compressors' part (row, T but for the first SETTLING_DAYS) of the sites in `rows`.

    Every day is run beside the others, each from SETTLING_DAYS before: load, weather and hour are each
    day's own.
    """
    days = past.clock.count // per_day
    length, settling = (SETTLING_DAYS + 1) * per_day, SETTLING_DAYS * per_day
    blocks = days - SETTLING_DAYS
    taken = (np.arange(blocks)[:, None] * per_day + np.arange(length)[None, :]).ravel()
    outlook = past.outlook.take(rows)
    load = filled(outlook.cooling_load_kw_th, np.isfinite(outlook.cooling_load_kw_th))

    def by_day(values: Floats) -> Floats:
        return values[:, taken].reshape(-1, length)

    beside = replace(
        outlook,
        clock=replace(past.clock, count=length),
        local_hour=outlook.local_hour[:length],
        local_weekday=outlook.local_weekday[:length],
        local_day=outlook.local_day[:length],
        holiday=outlook.holiday[:length],
        dry_bulb_c=by_day(outlook.dry_bulb_c),
        wet_bulb_c=by_day(outlook.wet_bulb_c),
        cooling_load_kw_th=by_day(load),
        rest_kw=by_day(outlook.rest_kw),
        price_per_kwh=by_day(outlook.price_per_kwh),
        billed_peak_kw=np.zeros(len(rows) * blocks),
    )
    site = np.repeat(past.site[rows], blocks)
    roster = fleet.roster.take(site)
    course = usual_course(roster, beside, resting(fleet, site, float(outlook.local_hour[0])), settling)
    kept = (course.power_kw, compressor_kw(roster, course))
    power, compressors = (values[:, settling:].reshape(len(rows), -1) for values in kept)
    return power, compressors


def _efficiency_assumptions(names: Strings, match: Match) -> list[Assumption]:
    why = "fitted: factor on the rated COP of its machines that makes usual operation draw what its plant meter read"
    return [
        Assumption("chillers", str(name), "rated_cop", f"x {factor:.3f}", why)
        for name, factor in zip(names.tolist(), match.efficiency.tolist(), strict=True)
        if factor != 1.0
    ]


def _match_notes(names: Strings, match: Match) -> list[str]:
    """How far usual operation is from the plant meters, in one sentence, and whom the correction leaves far off."""
    before, after, days = match.cv_rmse, match.corrected_cv_rmse, match.hours.max() / 24.0
    notes = [
        f"usual operation beside the plant meters of {len(names)} sites over {days:.0f} days: CV(RMSE) "
        f"{np.nanmedian(before):.0%} (median), {np.nanmedian(after):.0%} with each plant's efficiency fitted"
    ]
    far = np.flatnonzero(np.nan_to_num(after) > 2.0 * YARDSTICK_CV)
    if len(far):
        told = ", ".join(
            f"{names[row]} bias {match.bias[row]:+.0%}, CV(RMSE) {after[row]:.0%}" for row in far[:5]
        )
        more = f" and {len(far) - 5} more" if len(far) > 5 else ""
        notes.append(
            f"usual operation does not follow the plant meter: {told}{more}; check strategy, hours, tank"
        )
    return notes
