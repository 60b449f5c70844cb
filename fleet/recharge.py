"""Which recoveries a call offers its sites: the usual one, and the others where the recharge could meet a limit.

Owns the words of the option and the choice of sites. The recoveries themselves are sites/recovery.py's; what each is
worth, the quotes say.
"""

from collections.abc import Sequence
from dataclasses import replace
from typing import Final

import numpy as np

from fleet.errors import FleetError
from fleet.feeders import Feeders
from sites.blocks import Terms
from sites.direction import Direction
from sites.quote import Ground, Quoted, quote, together
from sites.quotes import COST_PARTS, DenseQuotes
from sites.recovery import RECOVERIES
from sites.units import Bools, Floats

EVERY: Final = "every"
DEMAND: Final = COST_PARTS.index("demand")
LEAST_MONEY: Final = 1e-6


def named(words: Sequence[str]) -> tuple[str, ...]:
    """The recoveries that the option's words name, in the order of RECOVERIES; () = as needed, where none is given."""
    unknown = [word for word in words if word not in (*RECOVERIES, EVERY)]
    if unknown:
        raise FleetError(
            f"--recovery: came {', '.join(repr(word) for word in unknown)}; expected {', '.join(RECOVERIES)} or "
            f"{EVERY}; leave it out for what limits call for"
        )
    return tuple(name for name in RECOVERIES if name in words or EVERY in words)


def quoted(
    base: Ground,
    terms: Terms,
    direction: Direction,
    asked: tuple[str, ...],
    feeders: Feeders,
    headroom_kw: Floats,
) -> tuple[Terms, Quoted]:
    """Quotes with the recoveries `asked`; where none is asked for (), with the usual one, and with every one for the
    sites whose recharge could meet a limit. The terms are those that the quotes keep."""
    if asked:
        terms = replace(terms, recoveries=asked)
        return terms, quote(base, terms, direction)
    plain = quote(base, terms, direction)
    varied = terms.allowed & could_meet_a_limit(plain.quotes, feeders, headroom_kw)
    if not varied.any():
        return terms, plain
    others = tuple(name for name in RECOVERIES if name not in terms.recoveries)
    more = quote(base, replace(terms, recoveries=others, allowed=varied), direction)
    kept = replace(terms, recoveries=(*terms.recoveries, *others), varied=varied)
    return kept, together(plain, more)


def could_meet_a_limit(quotes: DenseQuotes, feeders: Feeders, headroom_kw: Floats) -> Bools:
    """(N,) sites whose recharge could go over a node's limit (headroom_kw (J, T)) or raise a billed peak.

    A node could be met in an interval where the largest rises of all sites below it together are more than its room:
    no choice loads it more. Of a shed every rise is recharge, of an absorb those after the event. A billed peak is met
    where any window of a shed has a demand charge.
    """
    site, shed = quotes.site, quotes.direction is Direction.SHED
    rise = np.zeros((quotes.site_count, quotes.clock.count))
    if len(site):
        first = np.flatnonzero(np.diff(site, prepend=-1))
        rise[site[first]] = np.maximum(np.maximum.reduceat(quotes.change_kw, first, axis=0), 0.0)
    over = feeders.below.astype(np.float64) @ rise > headroom_kw
    after = quotes.event_from if shed else quotes.event_to
    over[:, :after] = False
    met = ((feeders.below.T.astype(np.float64) @ over) * rise).max(axis=1, initial=0.0) > 0.0
    if shed:
        met[site[quotes.cost[:, DEMAND] > LEAST_MONEY]] = True
    return np.asarray(met, dtype=np.bool_)
