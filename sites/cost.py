"""What a candidate costs: event case less usual case over the whole horizon, its parts apart."""

from typing import Any

import numpy as np

from sites.compiled import loop
from sites.conditions import Conditions
from sites.outlook import Outlook
from sites.roster import Buildings
from sites.units import Floats, Ints


def lack_price_per_kwh_th(here: Conditions, outlook: Outlook) -> Floats:
    """Price (site,) of a kWh_th missing at the horizon's end: what making it in charging hours draws, at
    those hours' mean price."""
    ice = here.ice_site[:, None]
    made = np.where(ice, here.ice_kw_th.sum(axis=1), here.direct_kw_th.sum(axis=1))
    drawn = np.where(ice, here.ice_full_kw.sum(axis=1), here.direct_full_kw.sum(axis=1))
    kw_per_kw_th = np.divide(drawn, made, out=np.zeros_like(made), where=made > 0.0)
    hours = here.charge_hours | ~here.charge_hours.any(axis=1, keepdims=True)
    price: Floats = (kw_per_kw_th * outlook.price_per_kwh * hours).sum(axis=1) / hours.sum(axis=1)
    return np.maximum(price, 0.0)


def cost_parts(
    outlook: Outlook,
    buildings: Buildings,
    usual_kw: Floats,
    site: Ints,
    change_kw: Floats,
    window: tuple[Ints, Ints],
    unmet_kwh_th: Floats,
    lack_kwh_th: Floats,
    lack_price: Floats,
) -> Floats:
    """Cost parts (row, len(COST_PARTS)) in the order before, during, recovery, demand, fee, comfort.

    Outlook, buildings, usual_kw (site, interval) and lack_price per site, and `site` (row,) tells a row's; all else per
    row, change_kw (row, interval).
    Demand is charged on what the building's peak exceeds max(billed peak, usual peak over the horizon).
    """
    last = int(site.max(initial=0))
    first = int(site.min(initial=last))
    some = slice(first, last + 1)
    building = np.ascontiguousarray(usual_kw[some] + outlook.rest_kw[some])
    price = np.ascontiguousarray(outlook.price_per_kwh[some] * outlook.clock.step_h)
    rows = (np.ascontiguousarray(index, dtype=np.int64) for index in (site - first, *window))
    sums = np.zeros((len(site), 4))
    _sum(*rows, np.ascontiguousarray(change_kw), price, building, sums)
    paid_already = np.maximum(outlook.billed_peak_kw[some], building.max(axis=1))[site - first]
    demand = buildings.demand_price_per_kw[site] * np.maximum(sums[:, 3] - paid_already, 0.0)
    return np.stack(
        [
            sums[:, 0],
            sums[:, 1],
            sums[:, 2] + lack_kwh_th * lack_price[site],
            demand,
            buildings.call_fee[site],
            buildings.comfort_payment_per_kwh_th[site] * unmet_kwh_th,
        ],
        axis=1,
    )


@loop
def _sum(
    site: Any, start: Any, end: Any, change_kw: Any, price_per_kw: Any, building_kw: Any, sums: Any
) -> None:
    """Energy cost before, in and after the window, and the building's highest power, into `sums` (row, 4)."""
    for r in range(len(site)):
        i = site[r]
        before, during, after, reached = 0.0, 0.0, 0.0, building_kw[i, 0] + change_kw[r, 0]
        for t in range(change_kw.shape[1]):
            cost = change_kw[r, t] * price_per_kw[i, t]
            reached = max(reached, building_kw[i, t] + change_kw[r, t])
            if t < start[r]:
                before += cost
            elif t < end[r]:
                during += cost
            else:
                after += cost
        sums[r, 0], sums[r, 1], sums[r, 2], sums[r, 3] = before, during, after, reached
