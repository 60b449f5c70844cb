"""What is expected over the horizon: weather, load, rest of the building, prices, all on one clock."""

from dataclasses import dataclass, replace

import numpy as np

from sites.clock import Clock
from sites.units import Bools, Floats, Ints


@dataclass(frozen=True)
class Outlook:
    """Arrays on the clock's grid; local wall time has been worked out at the door.

    Shapes: local_* and holiday (interval,); all others (site, interval) but billed_peak_kw (site,).
    """

    clock: Clock
    local_hour: Floats
    """Hour of the local day at the interval's start, 0 to under 24, with fractions."""
    local_weekday: Ints
    """0 = Monday."""
    local_day: Ints
    """Local calendar day, days since 1970-01-01."""
    holiday: Bools
    dry_bulb_c: Floats
    wet_bulb_c: Floats
    cooling_load_kw_th: Floats
    rest_kw: Floats
    price_per_kwh: Floats
    billed_peak_kw: Floats

    def take(self, rows: Ints) -> "Outlook":
        """Same outlook with one row per entry of `rows`."""
        names = (
            "dry_bulb_c",
            "wet_bulb_c",
            "cooling_load_kw_th",
            "rest_kw",
            "price_per_kwh",
            "billed_peak_kw",
        )
        return replace(self, **{name: getattr(self, name)[rows] for name in names})


def in_hours(local_hour: Floats, from_hour: Floats, to_hour: Floats) -> Bools:
    """Mask (site, interval): local hour within [from, to), over midnight where from > to, empty where equal."""
    hour, start, end = local_hour[None, :], from_hour[:, None], to_hour[:, None]
    inside = np.where(start <= end, (hour >= start) & (hour < end), (hour >= start) | (hour < end))
    result: Bools = inside.astype(np.bool_)
    return result
