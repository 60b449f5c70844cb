"""The tanks of one row together: what they can give to a load and take from machines, shared among them.

tank.py knows one tank; here a row's tanks act as one, in proportion to what each could do, with the loop's
temperatures by layout and the held-back inventory. Called by the loop over rows only: `site`, `tanks` (tank,) are
records of rows.py, `stored` (tank,) and `now` records of course.py, `knots` (tank, knot) room to work in.
"""

from typing import Any

from sites.compiled import Number, inner
from sites.tank import (
    KNOT_SOC,
    fill_knots,
    loss_kw_th,
    mean_difference_k,
    on_lines_kw_th,
    steady_charge_kw_th,
    steady_discharge_kw_th,
)
from sites.units import Floats

SERIES_PASSES = 2
"""Leaves the limit of a tank in series less than 0.2 % too high."""


@inner
def stand(
    site: Any, tanks: Any, stored: Any, inventory: Floats, step_h: Number
) -> tuple[Number, Number, Number]:
    """Inventory and standing loss of each tank at the interval's start; returns what all hold, what those in service
    hold, and what those in service lose."""
    every = 0.0
    held = 0.0
    lost = 0.0
    for k in range(site.tank_count):
        tank, own = tanks[k], stored[k]
        loss = loss_kw_th(
            tank.loss_of_capacity, inventory[k], tank.capacity_kwh_th, tank.loss_fraction_per_h, step_h
        )
        own.inventory_start_kwh_th = inventory[k]
        own.loss_kw_th = loss
        own.charge_kw_th = 0.0
        own.discharge_kw_th = 0.0
        every += inventory[k]
        if tank.in_service:
            held += inventory[k]
            lost += loss
    return every, held, lost


@inner
def inlet_c(site: Any, tank_share: Number) -> Number:
    """Temperature at the tank's inlet: the loop's return in parallel; in series behind machines that take the rest of
    the load at the same flow, supply + (return - supply) x the tank's share."""
    rise = site.return_c - site.supply_c
    return site.supply_c + rise * (min(max(tank_share, 0.0), 1.0) if site.series else 1.0)


@inner
def _usable(
    site: Any,
    tanks: Any,
    stored: Any,
    knots: Floats,
    share: Number,
    staged: bool,
    held: Number,
    step_h: Number,
) -> tuple[Number, Number]:
    """What the tanks could give at the inlet that their `share` of the load makes: in all, and (in a stage) so that
    the held-back inventory is left. The curve that limits each tank is left in `knots`."""
    most = 0.0
    lost = 0.0
    lmtd = mean_difference_k(inlet_c(site, share), site.supply_c)
    for k in range(site.tank_count):
        tank, own = tanks[k], stored[k]
        if site.series:
            fill_knots(tank.base, tank.slope, tank.capacity_kwh_th, tank.ceiling_kw_th, lmtd, knots[k])
        else:
            for j in range(len(KNOT_SOC)):
                knots[k, j] = tank.knots_kw_th[j]
        own.lmtd_k = lmtd
        own.most_kw_th = 0.0
        lost += own.loss_kw_th
        if tank.in_service:
            own.most_kw_th = steady_discharge_kw_th(
                own.inventory_start_kwh_th, own.loss_kw_th, tank.capacity_kwh_th, knots[k], step_h
            )
            most += own.most_kw_th
    free = max((held - site.reserve_kwh_th) / step_h - lost, 0.0)
    return most, min(most, free) if staged else most


@inner
def discharge(
    site: Any, tanks: Any, stored: Any, now: Any, knots: Floats, staged: bool, held: Number, step_h: Number
) -> Number:
    """What the tanks give of what is wanted beside machines that can do `now.ready_kw_th`; returns what they could.

    In series the inlet follows the tanks' share of what is served (the building's flow is cut to what can be
    cooled to its supply), and the share follows the limit: from the share that is wanted, SERIES_PASSES more
    close in on the limit from above, each some eight times nearer. In parallel the inlet is the loop's return
    and one pass is exact. Tanks of eutectic salt take on no more of the load than they can cool.
    """
    load, ready = now.load_kw_th, now.ready_kw_th
    reachable = site.reach * load
    wanted = min(now.wanted_kw_th, reachable)
    share = wanted / max(load, 1e-9)
    drawn = wanted
    most = 0.0
    usable = 0.0
    for _ in range(1 + SERIES_PASSES if site.series else 1):
        most, usable = _usable(site, tanks, stored, knots, share, staged, held, step_h)
        drawn = min(drawn, usable)
        if drawn >= wanted and load - drawn <= ready:
            break  # the share is the one it was worked out for
        share = drawn / max(drawn + min(load - drawn, ready), 1e-9)
    given = drawn / most if most > 0.0 else 0.0
    could = min(usable, reachable) / most if most > 0.0 else 0.0
    sum_could = 0.0
    for k in range(site.tank_count):
        own = stored[k]
        own.discharge_kw_th = own.most_kw_th * given
        own.most_kw_th *= could
        sum_could += own.most_kw_th
    now.drawn_kw_th = drawn
    return sum_could


@inner
def charge(site: Any, tanks: Any, stored: Any, offered: Number, step_h: Number) -> Number:
    """Charge of each tank from `offered` machine cooling; returns what all take, kW_th."""
    most = 0.0
    for k in range(site.tank_count):
        tank, own = tanks[k], stored[k]
        own.charge_kw_th = 0.0
        if tank.in_service:
            own.charge_kw_th = steady_charge_kw_th(
                own.inventory_start_kwh_th,
                own.loss_kw_th,
                tank.capacity_kwh_th,
                tank.charge_knots_kw_th,
                step_h,
            )
            most += own.charge_kw_th
    part = min(offered, most) / most if most > 0.0 else 0.0
    taken = 0.0
    for k in range(site.tank_count):
        stored[k].charge_kw_th *= part
        taken += stored[k].charge_kw_th
    return taken


@inner
def settle(site: Any, tanks: Any, stored: Any, inventory: Floats, step_h: Number) -> tuple[Number, Number]:
    """Inventory at the interval's end, written to `inventory` (tank,) too; returns what all tanks and those in service
    hold."""
    every = 0.0
    held = 0.0
    for k in range(site.tank_count):
        own = stored[k]
        net = own.charge_kw_th - own.discharge_kw_th - own.loss_kw_th
        end = own.inventory_start_kwh_th + net * step_h
        own.inventory_kwh_th = end
        inventory[k] = end
        every += end
        if tanks[k].in_service:
            held += end
    return every, held


@inner
def limits(site: Any, tanks: Any, stored: Any, knots: Floats) -> None:
    """Discharge limit of each tank at end-of-interval inventory; 0 for one out of service."""
    for k in range(site.tank_count):
        tank, own = tanks[k], stored[k]
        limit = on_lines_kw_th(own.inventory_kwh_th, tank.capacity_kwh_th, knots[k])
        own.discharge_limit_kw_th = limit if tank.in_service else 0.0
