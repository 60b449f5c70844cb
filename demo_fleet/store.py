"""The tank of the finer model: ice melted and frozen through a UA that follows inventory, or a thermocline.

The brine loop and the tank's surface are solved together: Q = UA LMTD(T_in, T_out) = m cp (T_in - T_out) at a
freezing point of 0 degC gives T_out = T_in exp(-UA / m cp). UA shapes are this file's own (common practice, no
source). Axes: row R, tank K.
"""

from typing import Final

import numpy as np

from sites.units import Bools, Floats, Ints

KINDS: Final = ("ice_internal_melt", "ice_external_melt", "chilled_water")
WARM_BY_K: Final = 0.5
"""The plant lets the tank's water leave this much over the loop's supply before it throttles."""
GLIDE_K: Final = 2.5
"""Brine warms by about this much through a tank that freezes."""


def is_ice(kind: Ints) -> Bools:
    """True where the tank holds ice, any shape."""
    result: Bools = kind < KINDS.index("chilled_water")
    return result


def melt_ua_kw_per_k(kind: Ints, capacity: Floats, inventory: Floats) -> Floats:
    """UA between brine and ice [kW/K] while melting, any shape.

    Internal melt: a water annulus grows, 0.060 C (1 - (1 - x)^1.7) with x = inventory / C. External melt:
    falls fast at first, then slowly, C (0.027 + 0.088 exp(-4 (1 - x))), with little ice left like x / 0.04.
    """
    x = np.clip(inventory / np.maximum(capacity, 1e-9), 0.0, 1.0)
    internal = 0.060 * (1.0 - (1.0 - x) ** 1.7)
    external = (0.027 + 0.088 * np.exp(-4.0 * (1.0 - x))) * np.minimum(x / 0.04, 1.0)
    result: Floats = capacity * np.where(kind == 0, internal, external)
    return result


def freeze_ua_kw_per_k(capacity: Floats, inventory: Floats) -> Floats:
    """UA between brine and water [kW/K] while freezing, any shape: ice on the pipe insulates it."""
    x = np.clip(inventory / np.maximum(capacity, 1e-9), 0.0, 1.0)
    result: Floats = capacity * 0.062 * (1.0 - 0.62 * x) * np.clip((1.0 - x) / 0.02, 0.0, 1.0)
    return result


def lmtd_k(inlet_c: Floats, outlet_c: Floats) -> Floats:
    """Log-mean difference to ice at 0 degC between an inlet warmer than the outlet, any shape."""
    ratio = np.maximum(inlet_c, outlet_c + 1e-6) / np.maximum(outlet_c, 1e-6)
    result: Floats = (np.maximum(inlet_c, outlet_c + 1e-6) - outlet_c) / np.log(ratio)
    return result


def melt_kw_th(ua: Floats, inlet_c: Floats, supply_c: Floats, flow_kw_per_k: Floats) -> Floats:
    """Most that the loop can draw [kW_th], any shape; `flow_kw_per_k` is m cp at full pump speed.

    At full flow T_out = T_in exp(-UA / m cp). Where that is colder than the warmest outlet allowed
    (supply + WARM_BY_K) full flow is taken and blended; else flow is throttled until T_out is just that.
    """
    flow = np.maximum(flow_kw_per_k, 1e-9)
    full_flow_outlet = inlet_c * np.exp(-ua / flow)
    warmest = supply_c + WARM_BY_K
    throttled = ua * lmtd_k(inlet_c, warmest)
    result: Floats = np.where(
        full_flow_outlet <= warmest,
        flow * (inlet_c - full_flow_outlet),
        np.where(inlet_c > warmest, throttled, 0.0),
    )
    return result


def freeze_kw_th(ua: Floats, brine_c: Floats) -> Floats:
    """Most that leaving brine of `brine_c` below zero can freeze [kW_th], any shape."""
    cold = np.maximum(-brine_c, 0.0)
    result: Floats = ua * lmtd_k(cold, np.maximum(cold - GLIDE_K, 0.3))
    return result


def water_kw_th(capacity: Floats, inventory: Floats, limit: Floats) -> Floats:
    """Most that a chilled-water tank gives [kW_th]: flow limit, falling when the thermocline comes (last 6 %)."""
    x = inventory / np.maximum(capacity, 1e-9)
    result: Floats = limit * np.clip(x / 0.06, 0.0, 1.0)
    return result


def loss_kw_th(
    kind: Ints, capacity: Floats, inventory: Floats, fraction_per_h: Floats, step_h: float
) -> Floats:
    """Standing loss [kW_th], at most what is there: of capacity for ice, of inventory for chilled water."""
    held = np.where(is_ice(kind), capacity, inventory)
    result: Floats = np.minimum(fraction_per_h * held, inventory / step_h)
    return result
