"""Sites packed into records that a loop over rows reads, and the rows to be simulated: a site, or a candidate of it.

What one row needs in one interval lies together in memory; many rows (candidates) read the records of one site.
"""

from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from sites import chiller, comfort, tank
from sites.conditions import Conditions
from sites.recovery import cap_kw
from sites.roster import FREEZING_KINDS, LAYOUTS, TANK_KINDS, Roster, kind_is
from sites.units import AnyArray, Bools, Floats, Ints, total

_KNOTS = ("f8", (len(tank.KNOT_SOC),))

SITE: Final = np.dtype(
    [
        ("strategy", "i8"),
        ("series", "?"),
        ("ice_site", "?"),
        ("machine_count", "i8"),
        ("tank_count", "i8"),
        *((name, "f8") for name in ("supply_c", "return_c", "reach", "stage_up_fraction", "critical_kw_th")),
        *((name, "f8") for name in ("shared_aux_kw", "tank_pump_kw", "level_kw_th", "reserve_kwh_th")),
        *((name, "f8") for name in ("capacity_kwh_th", "size_kwh_th")),
        *((name, "f8") for name in ("air_of_air", "air_of_mass", "air_gain")),
        *((name, "f8") for name in ("mass_of_air", "mass_of_mass", "mass_gain")),
        *((name, "f8") for name in ("mean_of_air", "mean_of_mass", "mean_gain")),
    ],
    align=True,
)
"""(site,): capacity of the tanks in service, size of all; the zone's nine numbers of one step (comfort.TwoNode)."""
MACHINE: Final = np.dtype(
    [("makes_ice", "?"), *((name, "f8") for name in ("dedicated_aux_kw", "c1", "c2", "c3", "plr_min"))],
    align=True,
)
"""(site, machine)"""
TANK: Final = np.dtype(
    [
        ("in_service", "?"),
        ("loss_of_capacity", "?"),
        *((name, "f8") for name in ("capacity_kwh_th", "loss_fraction_per_h", "ceiling_kw_th")),
        *((name, *_KNOTS) for name in ("base", "slope", "knots_kw_th", "charge_knots_kw_th")),
    ],
    align=True,
)
"""(site, tank): curves of discharge (tank.RateCurves) and their knots at the loop's return; knots of charging, for
brine that charges is as cold at every hour."""
HOUR: Final = np.dtype(
    [
        ("load_kw_th", "f8"),
        ("on_peak_left_h", "f8"),
        ("recoveries", "i8"),
        ("charge", "?"),
        ("occupied", "?"),
    ],
    align=True,
)
"""(site, interval): bit c of `recoveries` is set in the hours that recovery c may use."""
ABLE: Final = np.dtype(
    [(name, "f8") for name in ("direct_kw_th", "direct_full_kw", "ice_kw_th", "ice_full_kw")]
)
"""(site, interval, machine)"""
USUAL: Final = np.dtype(
    [
        (name, "f8")
        for name in ("power_kw", "unmet_kw_th", "charge_kw_th", "held_kwh_th", "all_kwh_th", "room_kw")
    ]
)
"""(site, interval) of the usual case: held by tanks in service and by all, at the interval's end; `room_kw` is the
plant power that a capped recovery keeps to."""


@dataclass(frozen=True)
class Plants:
    """Sites as records, and which of them, under which recovery, each row (row,) is."""

    sites: AnyArray
    """SITE"""
    machines: AnyArray
    """MACHINE"""
    tanks: AnyArray
    """TANK"""
    hours: AnyArray
    """HOUR"""
    able: AnyArray
    """ABLE"""
    step_h: float
    site: Ints
    recovery: Ints
    """(row,) index into sites.recovery.RECOVERIES: when the tank may be brought back to the usual case's level"""
    recover_from: Ints
    """(row,) interval from which the recovery holds"""

    def pick(self, rows: Ints, recovery: tuple[Ints, Ints] | None = None) -> "Plants":
        """The same sites with other rows, (row,) of site indices; `recovery` as in `plants`."""
        as_usual = np.zeros(len(rows), dtype=np.int64)
        code, recover_from = (as_usual, as_usual) if recovery is None else recovery
        return replace(self, site=rows, recovery=code, recover_from=recover_from)


def plants(
    roster: Roster,
    here: Conditions,
    tank_available: Bools,
    rows: Ints,
    recovery: tuple[Ints, Ints] | None = None,
) -> Plants:
    """Pack the sites, and take rows (row,) of site indices.

    `recovery`: index into RECOVERIES and first interval it holds in, each (row,); None = as usual for all.
    """
    in_service = tank_available & roster.tanks.exists
    tanks = _tanks(roster, here, in_service)
    every = Plants(
        sites=_sites(roster, here, in_service),
        machines=_machines(roster),
        tanks=tanks,
        hours=_hours(here),
        able=_filled(
            ABLE,
            direct_kw_th=np.moveaxis(here.direct_kw_th, 1, 2),
            direct_full_kw=np.moveaxis(here.direct_full_kw, 1, 2),
            ice_kw_th=np.moveaxis(here.ice_kw_th, 1, 2),
            ice_full_kw=np.moveaxis(here.ice_full_kw, 1, 2),
        ),
        step_h=here.step_h,
        site=rows,
        recovery=rows,
        recover_from=rows,
    )
    return every.pick(rows, recovery)


def usual_hours(
    rows: Plants, here: Conditions, unmet: Floats, inventory: Floats, charge: Floats, power: Floats
) -> AnyArray:
    """USUAL of every site: unmet, charge and power (site, interval), inventory (site, tank, interval)."""
    in_service = rows.tanks["in_service"][:, :, None]
    return _filled(
        USUAL,
        power_kw=power,
        unmet_kw_th=unmet,
        charge_kw_th=charge,
        held_kwh_th=np.where(in_service, inventory, 0.0).sum(axis=1),
        all_kwh_th=inventory.sum(axis=1),
        room_kw=cap_kw(here.rest_kw, here.billed_peak_kw, power),
    )


def _filled(dtype: np.dtype[Any], **columns: AnyArray) -> AnyArray:
    """Records of the columns' shape."""
    first = next(iter(columns.values()))
    records = np.zeros(first.shape, dtype=dtype)
    for name, column in columns.items():
        records[name] = column
    return records


def _sites(roster: Roster, here: Conditions, in_service: Bools) -> AnyArray:
    buildings, tanks = roster.buildings, roster.tanks
    zone = comfort.two_node(buildings, here.step_h)
    step, gain, mean = zone.transition, zone.gain_k_per_kw, zone.mean_air
    return _filled(
        SITE,
        strategy=buildings.strategy,
        series=buildings.layout == LAYOUTS.index("series"),
        ice_site=here.ice_site,
        machine_count=_used(roster.chillers.exists),
        tank_count=_used(tanks.exists),
        supply_c=buildings.supply_c,
        return_c=buildings.return_c,
        reach=_reach(roster, in_service),
        stage_up_fraction=buildings.stage_up_fraction,
        critical_kw_th=buildings.critical_kw_th,
        shared_aux_kw=buildings.shared_aux_kw,
        tank_pump_kw=buildings.tank_pump_kw,
        level_kw_th=here.level_kw_th,
        reserve_kwh_th=buildings.held_back_kwh_th,
        capacity_kwh_th=total(np.where(in_service, tanks.capacity_kwh_th, 0.0)),
        size_kwh_th=total(tanks.capacity_kwh_th),
        air_of_air=step[:, 0, 0],
        air_of_mass=step[:, 0, 1],
        air_gain=gain[:, 0],
        mass_of_air=step[:, 1, 0],
        mass_of_mass=step[:, 1, 1],
        mass_gain=gain[:, 1],
        mean_of_air=mean[:, 0],
        mean_of_mass=mean[:, 1],
        mean_gain=zone.mean_air_gain_k_per_kw,
    )


def _machines(roster: Roster) -> AnyArray:
    chillers = roster.chillers
    c1, c2, c3, plr_min = np.moveaxis(chiller.part_load_curves()[chillers.kind], -1, 0)
    return _filled(
        MACHINE,
        makes_ice=chillers.makes_ice,
        dedicated_aux_kw=chillers.dedicated_aux_kw,
        c1=c1,
        c2=c2,
        c3=c3,
        plr_min=plr_min,
    )


def _tanks(roster: Roster, here: Conditions, in_service: Bools) -> AnyArray:
    buildings, tanks = roster.buildings, roster.tanks
    lmtd = tank.lmtd_k(buildings.return_c, buildings.supply_c)[:, None]
    return _filled(
        TANK,
        in_service=in_service,
        loss_of_capacity=kind_is(tanks.kind, TANK_KINDS, FREEZING_KINDS),
        capacity_kwh_th=tanks.capacity_kwh_th,
        loss_fraction_per_h=tanks.loss_fraction_per_h,
        ceiling_kw_th=tanks.discharge_limit_kw_th,
        base=here.discharge.base,
        slope=here.discharge.slope,
        knots_kw_th=tank.knots_kw_th(
            here.discharge, tanks.capacity_kwh_th, tanks.discharge_limit_kw_th, lmtd
        ),
        charge_knots_kw_th=tank.knots_kw_th(
            here.charge, tanks.capacity_kwh_th, tanks.charge_limit_kw_th, here.charge_lmtd_k[:, None]
        ),
    )


def _hours(here: Conditions) -> AnyArray:
    bit = (1 << np.arange(len(here.recovery_hours)))[:, None, None]
    return _filled(
        HOUR,
        load_kw_th=here.load_kw_th,
        on_peak_left_h=here.on_peak_left_h,
        recoveries=(here.recovery_hours * bit).sum(axis=0),
        charge=here.charge_hours,
        occupied=here.occupied,
    )


def _used(exists: Bools) -> Ints:
    """How many machines or tanks of each site (site,) are to be looked at: up to the last that exists."""
    number = np.arange(1, exists.shape[1] + 1)
    return np.asarray((exists * number).max(axis=1, initial=0))


def _reach(roster: Roster, in_service: Bools) -> Floats:
    """Share of the load (site,) that the tanks can take on: all of it, but with a tank of eutectic salt, which cools no
    colder than its melting point, what lies between the return and that; the rest is left to machines behind it."""
    buildings, tanks = roster.buildings, roster.tanks
    salt = (kind_is(tanks.kind, TANK_KINDS, ("eutectic_salt",)) & in_service).any(axis=1)
    whole = np.maximum(buildings.return_c - buildings.supply_c, 1e-9)
    share = np.clip((buildings.return_c - tank.EUTECTIC_MELTING_C) / whole, 0.0, 1.0)
    return np.where(salt, share, 1.0)
