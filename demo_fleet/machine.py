"""The chiller of the finer model: capacity by linear slopes, power by lift and a quadratic in part load.

Owns its own formulae and numbers (common practice, no source, chosen near ordinary machines), on purpose not
those of any tool that reads the fleet folder. Axes: row R, machine M.
"""

from typing import Final

import numpy as np

from sites.units import Bools, Floats

AIR_REFERENCE_C: Final = 35.0
TOWER_REFERENCE_C: Final = 29.4
LEAVING_REFERENCE_C: Final = 6.67
AIR_FLOOR_C: Final = 26.0
"""Head-pressure control: colder air brings no further gain."""
TOWER_FLOOR_C: Final = 21.0
CAPACITY_PER_LEAVING_K: Final = 0.027
ICE_REFERENCE_C: Final = 5.0
PART_LOAD_AIR: Final = (0.04, 0.90, 0.06)
PART_LOAD_TOWER: Final = (0.21, 0.35, 0.44)


def condenser_c(air_cooled: Bools, approach_k: Floats, dry_bulb_c: Floats, wet_bulb_c: Floats) -> Floats:
    """What the condensers feel, (R, M): air, or tower water; dry and wet bulb (R,)."""
    air = np.maximum(dry_bulb_c[:, None], AIR_FLOOR_C)
    water = np.maximum(wet_bulb_c[:, None] + approach_k, TOWER_FLOOR_C)
    return np.where(air_cooled, air, water)


def capacity_fraction(air_cooled: Bools, leaving_c: Floats, condenser: Floats) -> Floats:
    """Available over rated capacity, (R, M): 1 + a (leaving - ref) - b (condenser - ref)."""
    slope = np.where(air_cooled, 0.0075, 0.0085)
    reference = np.where(air_cooled, AIR_REFERENCE_C, TOWER_REFERENCE_C)
    warm: Floats = 1.0 + CAPACITY_PER_LEAVING_K * (leaving_c[:, None] - LEAVING_REFERENCE_C)
    return warm - slope * (condenser - reference)


def eir_fraction(air_cooled: Bools, leaving_c: Floats, condenser: Floats) -> Floats:
    """Power per cooling over its rated value, (R, M): (lift / reference lift)^n.

    lift = condensing less evaporating temperature; condensing 12 K over air or 6 K over tower water,
    evaporating 3 K under leaving water.
    """
    over = np.where(air_cooled, 12.0, 6.0)
    reference = np.where(air_cooled, AIR_REFERENCE_C, TOWER_REFERENCE_C)
    lift = condenser + over - leaving_c[:, None] + 3.0
    rated = reference + over - LEAVING_REFERENCE_C + 3.0
    exponent = np.where(air_cooled, 1.12, 0.80)
    result: Floats = (lift / rated) ** exponent
    return result


def ice_capacity_fraction(
    air_cooled: Bools, brine_c: Floats, condenser: Floats, slope_per_k: Floats
) -> Floats:
    """Available over rated capacity when making ice, (R, M): the +5 degC value less `slope_per_k` a kelvin."""
    base = capacity_fraction(air_cooled, np.full_like(brine_c, ICE_REFERENCE_C), condenser)
    return base * np.maximum(1.0 - slope_per_k * (ICE_REFERENCE_C - brine_c[:, None]), 0.0)


def ice_eir_fraction(air_cooled: Bools, brine_c: Floats, condenser: Floats, slope_per_k: Floats) -> Floats:
    """Power per cooling over its rated value when making ice, (R, M)."""
    base = eir_fraction(air_cooled, np.full_like(brine_c, ICE_REFERENCE_C), condenser)
    return base / np.maximum(1.0 - slope_per_k * (ICE_REFERENCE_C - brine_c[:, None]), 0.2)


def part_load_fraction(air_cooled: Bools, part_load: Floats) -> Floats:
    """Power over full-load power, (R, M): a + b x + c x^2; below a tenth of load the machine cycles."""
    a, b, c = (np.where(air_cooled, one, two) for one, two in zip(PART_LOAD_AIR, PART_LOAD_TOWER))
    held = np.maximum(part_load, 0.1)
    steady = a + held * (b + held * c)
    cycling: Floats = steady * np.minimum(part_load / 0.1, 1.0)
    return cycling
