"""What a row's machines make in one interval, cooling for the load and charge for the tanks, and what that draws.

Owns which machines go over to ice making, how cooling and charge are shared among machines, and the power of the
plant. When tanks are charged and how much is asked for belongs to plant.py. Called by the loop over rows only:
`site`, `machines` (machine,), `able` (machine,), `tanks` (tank,) are records of rows.py, `now`, `made` (machine,),
`stored` (tank,) records of course.py, `work` (WORK_ROWS, machine) room to work in.
"""

from typing import Any

from sites.chiller import curve_power_kw
from sites.compiled import Number, inner
from sites.dispatch import share_load
from sites.storage import charge
from sites.units import Floats

CAP_PASSES = 4
"""Passes that bring a capped charge down to its power; what is still over it then does not charge."""
WORK_ROWS = 5
DIRECT, WARM, ICE, WARM_LOAD, ICE_LOAD = range(WORK_ROWS)
"""Rows of `work`: capacity in direct cooling under the load limit; capacity and load of machines in direct cooling and
of those in ice making."""


@inner
def make(
    site: Any,
    machines: Any,
    able: Any,
    tanks: Any,
    made: Any,
    stored: Any,
    work: Floats,
    flows: tuple[Number, Number, Number],
    charging: bool,
    step_h: Number,
) -> tuple[Number, Number]:
    """Machine loads, charge and power; returns the plant's power and the charge of all tanks. `flows`: cooling for
    load and zone, charge asked for (inf: all there is), discharge.

    Ice sites: machines that make ice go over to ice making while charging, and carry in that mode what the
    others cannot of the building's load; where that would leave load unmet they stay in direct cooling and
    the tank waits.
    """
    cooling, asked, drawn = flows
    if not (charging and _modes(site, machines, able, made, work, cooling)):
        _cool(site, made, stored, work, cooling)
        return _power(site, machines, able, made, drawn), 0.0
    warm = 0.0
    chilling = 0.0
    for m in range(site.machine_count):
        warm += work[WARM, m]
        chilling += work[ICE, m]
    spare = warm + chilling - cooling
    offered = min(max(min(chilling, spare) if site.ice_site else spare, 0.0), asked)
    filled = charge(site, tanks, stored, offered, step_h)
    on_warm = min(cooling, warm)
    on_ice = cooling - on_warm
    into_warm = 0.0 if site.ice_site else filled
    into_ice = filled if site.ice_site else 0.0
    for capacity, load, demand in (
        (WARM, WARM_LOAD, on_warm + into_warm),
        (ICE, ICE_LOAD, on_ice + into_ice),
    ):
        _load(site, work, capacity, load, demand if capacity == WARM or chilling > 0.0 else 0.0)
    warm_share = into_warm / (on_warm + into_warm) if on_warm + into_warm > 0.0 else 0.0
    ice_share = into_ice / (on_ice + into_ice) if on_ice + into_ice > 0.0 else 0.0
    for m in range(site.machine_count):
        own = made[m]
        own.into_tank_kw_th = work[WARM_LOAD, m] * warm_share + work[ICE_LOAD, m] * ice_share
        own.direct_kw_th = work[WARM_LOAD, m] + work[ICE_LOAD, m] - own.into_tank_kw_th
        own.making_ice = own.making_ice and work[ICE_LOAD, m] > 0.0
    return _power(site, machines, able, made, filled + drawn), filled


@inner
def _cool(site: Any, made: Any, stored: Any, work: Floats, cooling: Number) -> None:
    """All machines in direct cooling, nothing into the tanks."""
    ready = 0.0
    for m in range(site.machine_count):
        ready += work[DIRECT, m]
    _load(site, work, DIRECT, WARM_LOAD, min(cooling, ready))
    for m in range(site.machine_count):
        own = made[m]
        own.making_ice = False
        own.direct_kw_th = work[WARM_LOAD, m]
        own.into_tank_kw_th = 0.0
    for k in range(site.tank_count):
        stored[k].charge_kw_th = 0.0


@inner
def _modes(site: Any, machines: Any, able: Any, made: Any, work: Floats, cooling: Number) -> Number:
    """Which machines go over to ice making while charging, and the capacities that leaves; False where they could not
    carry the building's cooling then."""
    capacity = 0.0
    for m in range(site.machine_count):
        own = made[m]
        own.making_ice = machines[m].makes_ice and site.ice_site
        work[WARM, m] = 0.0 if own.making_ice else work[DIRECT, m]
        work[ICE, m] = able[m].ice_kw_th * own.limit_fraction if own.making_ice else 0.0
        capacity += work[WARM, m] + work[ICE, m]
    return capacity >= cooling


@inner
def _load(site: Any, work: Floats, capacity: int, load: int, demand: Number) -> None:
    """Load of each machine, into row `load` of `work`, for a demand on the capacities of row `capacity`."""
    count = site.machine_count
    if demand > 0.0 and count > 0:
        share_load(demand, work[capacity, :count], site.stage_up_fraction, work[load, :count])
    else:
        for m in range(count):
            work[load, m] = 0.0


@inner
def _power(site: Any, machines: Any, able: Any, made: Any, through_tank: Number) -> Number:
    """Power of each machine with its own auxiliaries, and of the whole plant."""
    power = 0.0
    machine_load = 0.0
    for m in range(site.machine_count):
        machine, own = machines[m], made[m]
        load = own.direct_kw_th + own.into_tank_kw_th
        own.machine_kw = 0.0
        if load > 0.0:
            most = able[m].ice_kw_th if own.making_ice else able[m].direct_kw_th
            full = able[m].ice_full_kw if own.making_ice else able[m].direct_full_kw
            drawn = curve_power_kw(load, most, full, machine.c1, machine.c2, machine.c3, machine.plr_min)
            own.machine_kw = drawn + machine.dedicated_aux_kw
        power += own.machine_kw
        machine_load += load
    if machine_load + through_tank > 0.0:
        power += site.shared_aux_kw
    if through_tank > 0.0:
        power += site.tank_pump_kw
    return power


@inner
def make_within(
    site: Any,
    machines: Any,
    able: Any,
    tanks: Any,
    made: Any,
    stored: Any,
    work: Floats,
    flows: tuple[Number, Number, Number],
    charging: bool,
    step_h: Number,
    room_kw: Number,
) -> Number:
    """As `make`, with the charge held down so that the power stays within `room_kw`; returns the power.

    Power is nearly straight in the charge: each pass takes the chord from no charge to the last one's. Power that
    is over the room without any charge stays so, and is priced.
    """
    cooling, asked, drawn = flows
    power, filled = 0.0, 0.0
    least, held, held_charge = 0.0, 0.0, 0.0
    for turn in range(CAP_PASSES + 3):
        flow = (cooling, asked, drawn)
        power, filled = make(site, machines, able, tanks, made, stored, work, flow, charging, step_h)
        if turn == 0 and (power <= room_kw or filled <= 0.0):
            return power
        if turn == 1:
            least = power
        else:
            held, held_charge = power, filled
        if turn == CAP_PASSES + 1 and power <= room_kw + 1e-9:
            return power
        share = (room_kw - least) / (held - least) if held > least else 0.0
        asked = held_charge * min(max(share, 0.0), 1.0) if 0 < turn <= CAP_PASSES else 0.0
    return power
