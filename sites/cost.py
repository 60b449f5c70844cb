"""What a candidate costs: event case less usual case over the whole horizon, its parts apart."""

import numpy as np

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
    change_kw: Floats,
    window: tuple[Ints, Ints],
    unmet_kwh_th: Floats,
    lack_kwh_th: Floats,
    lack_price: Floats,
) -> Floats:
    """Cost parts (row, len(COST_PARTS)) in the order before, during, recovery, demand, fee, comfort.

    All arguments per row; outlook and buildings gathered to rows; usual_kw and change_kw (row, interval).
    Demand is charged on what the building's peak exceeds max(billed peak, usual peak over the horizon).
    """
    start, end = window
    hour = np.arange(change_kw.shape[1])[None, :]
    energy = change_kw * outlook.price_per_kwh * outlook.clock.step_h
    before = np.where(hour < start[:, None], energy, 0.0).sum(axis=1)
    after = np.where(hour >= end[:, None], energy, 0.0).sum(axis=1)
    during = np.where((hour >= start[:, None]) & (hour < end[:, None]), energy, 0.0).sum(axis=1)
    usual_building = usual_kw + outlook.rest_kw
    reached = (usual_building + change_kw).max(axis=1)
    paid_already = np.maximum(outlook.billed_peak_kw, usual_building.max(axis=1))
    demand = buildings.demand_price_per_kw * np.maximum(reached - paid_already, 0.0)
    return np.stack(
        [
            before,
            during,
            after + lack_kwh_th * lack_price,
            demand,
            buildings.call_fee,
            buildings.comfort_payment_per_kwh_th * unmet_kwh_th,
        ],
        axis=1,
    )
