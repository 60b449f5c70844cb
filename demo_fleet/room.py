"""The zone of the finer model: air and mass as rises above set-point, and the thermostat that pulls them down.

Explicit in the net heat, implicit in the couplings, at steps of minutes. Axis: row R.
"""

from typing import Final

from sites.units import Floats

PULL_DOWN_H: Final = 0.9
"""The thermostat asks for enough extra cooling to take the air's rise away in about this time."""


def pull_down_kw_th(air_k: Floats, air_kwh_per_k: Floats, coupling_kw_per_k: Floats) -> Floats:
    """Extra cooling the thermostat asks for, (R,)."""
    ask: Floats = air_k.clip(0.0) * (air_kwh_per_k / PULL_DOWN_H + 0.5 * coupling_kw_per_k)
    return ask


def advance(
    air_k: Floats,
    mass_k: Floats,
    net_kw_th: Floats,
    air_kwh_per_k: Floats,
    mass_kwh_per_k: Floats,
    coupling_kw_per_k: Floats,
    envelope_kw_per_k: Floats,
    step_h: float,
) -> tuple[Floats, Floats]:
    """Rises of air and mass after a step, (R,), by the backward Euler step of

    C_a a' = net - H a - K (a - m),  C_m m' = K (a - m),

    which conserves net dt = C_a da + C_m dm + H a_end dt exactly.
    """
    a_a = air_kwh_per_k + (envelope_kw_per_k + coupling_kw_per_k) * step_h
    m_m = mass_kwh_per_k + coupling_kw_per_k * step_h
    off = coupling_kw_per_k * step_h
    right_a = air_kwh_per_k * air_k + net_kw_th * step_h
    right_m = mass_kwh_per_k * mass_k
    determinant = a_a * m_m - off * off
    return (right_a * m_m + off * right_m) / determinant, (a_a * right_m + off * right_a) / determinant
