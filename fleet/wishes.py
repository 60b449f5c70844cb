"""What a manager prefers among choices that meet a request: who must be in, who must not, few sites, little too much.

Owns how a wish becomes money in the choice (steering, kept apart from real money in the proof) and the checks of
the lists. That a wish came true is checked on the answer, never taken from the steering.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fleet.errors import FleetError
from sites.units import Bools, Floats, Strings

WEIGHT = 10.0
"""Steering of a wish, as a multiple of the dearest candidate's money: no saving makes up for it."""
LEAST_OVER_SHARE = 0.01
"""Least price of over-delivery above a cap, as a share of the shortfall price."""


@dataclass(frozen=True)
class Wishes:
    """Site ids that must be called and that must not be, as few sites as can be, kW of over-delivery at most."""

    include: tuple[str, ...] = ()
    exclude: tuple[str, ...] = ()
    fewest: bool = False
    over_cap_kw: float | None = None


NONE = Wishes()


def check(wishes: Wishes, site_ids: Strings) -> None:
    """FleetError for ids that no site has, for a site on both lists, for a cap that is no kW."""
    known = {str(name) for name in site_ids}
    for option, names in (("--include", wishes.include), ("--exclude", wishes.exclude)):
        strangers = [name for name in names if name not in known]
        if strangers:
            raise FleetError(
                f"{option}: no site {', '.join(strangers[:5])} in this fleet; "
                "`shedwright quote` lists the sites there are"
            )
    both = [name for name in wishes.include if name in wishes.exclude]
    if both:
        raise FleetError(
            f"--include and --exclude both name {', '.join(both[:5])}: a site is called or not; take it off one list"
        )
    cap = wishes.over_cap_kw
    if cap is not None and not (np.isfinite(cap) and cap >= 0.0):
        raise FleetError(f"--most-over {cap:g}: expected kW of 0 or more; leave it out for no cap")


def named(names: Sequence[str], site_ids: Strings) -> Bools:
    """(N,) sites of the names."""
    return np.isin(site_ids.astype(str), np.array(names, dtype=str))


def weights(wishes: Wishes, net_cost: Floats) -> tuple[float, float]:
    """Money of steering for each call, and for each call of a site that must be in (taken off), from costs (C,)."""
    dearest = WEIGHT * max(float(np.abs(net_cost).max(initial=0.0)), 1.0)
    return (dearest if wishes.fewest else 0.0), (2.0 * dearest if wishes.include else 0.0)


def over_price_per_kwh(wishes: Wishes, usual: float, shortfall: float, factor: float) -> float:
    """Price of over-delivery: the usual one; above a cap `factor` times as much, or as a share of the shortfall's."""
    if wishes.over_cap_kw is None:
        return usual
    return factor * max(usual, LEAST_OVER_SHARE * shortfall)
