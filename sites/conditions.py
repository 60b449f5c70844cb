"""What every interval of the horizon offers each plant, worked out once before any simulation.

Owns: machine capability by weather, the strategy's hours as masks, the levelling rate, the tanks' rate
curves. Leaves to plant.py: what is done with them.
"""

from dataclasses import dataclass

import numpy as np

from sites import chiller, tank
from sites.outlook import Outlook, in_hours
from sites.recovery import recovery_hours
from sites.roster import ICE_KINDS, STRATEGIES, TANK_KINDS, Roster, Standing, kind_is
from sites.units import Bools, Floats

RETURN_GLIDE_K = 2.0
"""Brine warms by this much through an ice tank while charging (common practice, no source)."""


@dataclass(frozen=True)
class Conditions:
    """Arrays over (site, ..., interval); machine arrays are zero where a machine is missing or out of service."""

    direct_kw_th: Floats
    """(site, machine, interval) capacity in direct cooling"""
    direct_full_kw: Floats
    """(site, machine, interval) power at that capacity"""
    ice_kw_th: Floats
    ice_full_kw: Floats
    clipped_count: int
    """Machine-intervals whose weather or water lay outside the performance curves' range."""
    load_kw_th: Floats
    on_peak: Bools
    on_peak_left_h: Floats
    """(site, interval) hours of the running on-peak period still to come, this interval included; else 0"""
    charge_hours: Bools
    recovery_hours: Bools
    """(recovery, site, interval) hours that each of RECOVERIES may use"""
    rest_kw: Floats
    billed_peak_kw: Floats
    """(site,)"""
    occupied: Bools
    level_kw_th: Floats
    """(site,) flat chiller output of load levelling: mean load of the first day plus standing loss"""
    discharge: tank.RateCurves
    charge: tank.RateCurves
    charge_lmtd_k: Floats
    """(site,)"""
    ice_site: Bools
    """(site,) True: charging needs machines in ice making"""
    step_h: float


def conditions(roster: Roster, outlook: Outlook, standing: Standing) -> Conditions:
    """Conditions of every site over the outlook's clock."""
    buildings, chillers, tanks = roster.buildings, roster.chillers, roster.tanks
    condenser = chiller.condenser_c(chillers, outlook.dry_bulb_c, outlook.wet_bulb_c)
    direct = chiller.direct(chillers, buildings.supply_c, condenser)
    ice = chiller.ice(chillers, buildings.charge_brine_c, condenser)
    up = (chillers.exists & standing.chiller_available)[:, :, None]
    hour = outlook.local_hour
    on_peak = in_hours(hour, buildings.peak_from_hour, buildings.peak_to_hour)
    ice_tank = kind_is(tanks.kind, TANK_KINDS, ICE_KINDS) & tanks.exists
    brine = buildings.charge_brine_c
    charge_hours = in_hours(hour, buildings.charge_from_hour, buildings.charge_to_hour)
    return Conditions(
        direct_kw_th=direct.available_kw_th * up,
        direct_full_kw=direct.full_load_kw * up,
        ice_kw_th=ice.available_kw_th * up,
        ice_full_kw=ice.full_load_kw * up,
        clipped_count=direct.clipped_count,
        load_kw_th=outlook.cooling_load_kw_th,
        on_peak=on_peak,
        on_peak_left_h=_run_left(on_peak) * outlook.clock.step_h,
        charge_hours=charge_hours,
        recovery_hours=recovery_hours(buildings, outlook, charge_hours),
        rest_kw=outlook.rest_kw,
        billed_peak_kw=outlook.billed_peak_kw,
        occupied=_occupied(roster, outlook),
        level_kw_th=level_kw_th(roster, outlook),
        discharge=tank.discharge_curves(tanks),
        charge=tank.charge_curves(tanks),
        charge_lmtd_k=np.asarray(tank.lmtd_k(-brine, np.maximum(-brine - RETURN_GLIDE_K, 0.5))),
        ice_site=np.asarray(ice_tank.any(axis=1), dtype=np.bool_),
        step_h=outlook.clock.step_h,
    )


def _run_left(mask: Bools) -> Floats:
    """Intervals left in the run of True that holds each interval, itself included; 0 outside (site, interval)."""
    left = np.zeros(mask.shape)
    running = np.zeros(mask.shape[0])
    for t in range(mask.shape[1] - 1, -1, -1):
        running = np.where(mask[:, t], running + 1.0, 0.0)
        left[:, t] = running
    return left


def _occupied(roster: Roster, outlook: Outlook) -> Bools:
    buildings = roster.buildings
    hours = in_hours(outlook.local_hour, buildings.occupied_from_hour, buildings.occupied_to_hour)
    workday = (outlook.local_weekday < 5) & ~outlook.holiday
    return hours & (workday[None, :] | buildings.occupied_all_week[:, None])


def level_kw_th(roster: Roster, outlook: Outlook, first: int = 0) -> Floats:
    """Flat rate (site,) over the 24 h from interval `first` on, one whole cycle of the load (Energy Management Handbook
    ch. 19: day's ton-hours / 24), and the standing loss; zero for other strategies, and where there is no load at
    all: no machine and no pump runs for a tank's loss alone."""
    day = min(outlook.clock.count, round(24.0 / outlook.clock.step_h))
    mean = outlook.cooling_load_kw_th[:, first : first + day].mean(axis=1)
    tanks = roster.tanks
    loss = (tanks.capacity_kwh_th * tanks.loss_fraction_per_h).sum(axis=1)
    levelling = roster.buildings.strategy == STRATEGIES.index("load_levelling")
    return np.where(levelling & (mean > 0.0), mean + loss, 0.0)
