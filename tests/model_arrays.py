"""Small arrays of machines, tanks and buildings for tests of the models in `sites`; numbers are invented."""

from dataclasses import fields

import numpy as np

from sites.roster import CHILLER_KINDS, TANK_KINDS, Buildings, Chillers, Tanks

CENTRIFUGAL = CHILLER_KINDS.index("water_cooled_centrifugal")
SCREW = CHILLER_KINDS.index("air_cooled_screw")


def chillers(kind=(CENTRIFUGAL,), capacity=1000.0, cop=5.5, exists=True, makes_ice=True, sites=1, **other):
    """(sites, machines) of the given kinds; every value broadcasts."""
    shape = (sites, len(kind))
    values = {
        "chiller_id": np.array([[f"ch{m}" for m in range(shape[1])]] * sites, dtype=object),
        "exists": exists,
        "kind": np.asarray(kind),
        "capacity_kw_th": capacity,
        "rated_cop": cop,
        "makes_ice": makes_ice,
        "ice_capacity_slope_per_k": 0.037,
        "ice_cop_slope_per_k": 0.028,
        "tower_approach_k": 4.0,
        "dedicated_aux_kw": 0.0,
        "min_on_minutes": 5.0,
        "min_off_minutes": 10.0,
        "start_to_start_minutes": 20.0,
        "starts_left": np.inf,
    }
    values.update(other)
    return Chillers(**{name: np.array(np.broadcast_to(value, shape)) for name, value in values.items()})


def tanks(kind="ice_internal_melt", capacity=370.61, loss=3e-4, shape=(1, 1), **other):
    """Tanks of one kind, or of one per entry where `kind` is a list; capacity broadcasts to `shape`."""
    codes = [TANK_KINDS.index(name) for name in ([kind] if isinstance(kind, str) else kind)]
    values = {
        "tank_id": np.array("tank", dtype=object),
        "exists": True,
        "kind": np.asarray(codes),
        "capacity_kwh_th": np.asarray(capacity, dtype=np.float64),
        "loss_fraction_per_h": loss,
        "discharge_limit_kw_th": np.inf,
        "charge_limit_kw_th": np.inf,
    }
    values.update(other)
    return Tanks(**{name: np.array(np.broadcast_to(value, shape)) for name, value in values.items()})


def buildings(count=1, **values):
    """Buildings with the given arrays (scalars are repeated) and zeros for all that a test does not read."""
    empty = {field.name: np.zeros(count) for field in fields(Buildings)}
    given = {name: np.array(np.broadcast_to(value, (count,))) for name, value in values.items()}
    return Buildings(**(empty | given))
