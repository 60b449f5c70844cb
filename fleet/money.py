"""Money of a settlement: performance, the share of pay it earns, and lines in the currency's minor unit.

Owns decimals and rounding. All arithmetic of money is decimal and is rounded once, on the line; the total is the
exact sum of its lines. Leaves delivered energy to settle.py.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import ROUND_FLOOR, ROUND_HALF_UP, Decimal
from functools import lru_cache
from typing import Final

import numpy as np

from fleet.errors import FleetError
from fleet.rules import SettlementRule
from sites.units import AnyArray, Bools, Floats, Ints

_TWO: Final = (
    "AED AFN ALL AMD AOA ARS AUD AWG AZN BAM BBD BDT BGN BMD BND BOB BRL BSD BTN BWP BYN BZD CAD CDF CHF CNY "
    "COP CRC CUP CVE CZK DKK DOP DZD EGP ERN ETB EUR FJD FKP GBP GEL GHS GIP GMD GTQ GYD HKD HNL HTG HUF IDR "
    "ILS INR IRR JMD KES KGS KHR KPW KYD KZT LAK LBP LKR LRD LSL MAD MDL MGA MKD MMK MNT MOP MRU MUR MVR MWK "
    "MXN MYR MZN NAD NGN NIO NOK NPR NZD PAB PEN PGK PHP PKR PLN QAR RON RSD RUB SAR SBD SCR SDG SEK SGD SHP "
    "SLE SOS SRD SSP STN SVC SYP SZL THB TJS TMT TOP TRY TTD TWD TZS UAH USD UYU UZS VES WST XCD YER ZAR ZMW"
)
_OTHER: Final = {
    0: "BIF CLP DJF GNF ISK JPY KMF KRW PYG RWF UGX VND VUV XAF XOF XPF",
    3: "BHD IQD JOD KWD LYD OMR TND",
    4: "CLF UYW",
}
"""Minor units of ISO 4217, from memory."""
_NONE: Final = "XAG XAU XBA XBB XBC XBD XDR XPD XPT XSU XTS XUA XXX"
"""Codes of the same list that have no minor unit: metals, units of account, none at all."""


@dataclass(frozen=True)
class Prices:
    """What a kWh earns and costs a site, and the limits of the paid share."""

    currency: str
    capacity_payment_per_kwh: float = 0.0
    energy_payment_per_kwh: float = 0.0
    penalty_per_kwh: float = 0.0
    performance_floor: float = 0.0
    performance_cap: float = 1.0


@dataclass(frozen=True)
class Lines:
    """Lines of each site's statement, arrays of Decimal of shape (site,), from the site's side."""

    capacity_payment: AnyArray
    energy_payment: AnyArray
    penalty: AnyArray
    total: AnyArray


@lru_cache(maxsize=256)
def minor_digits(currency: str) -> tuple[int, str | None]:
    """Decimals of the currency's minor unit (ISO 4217), and a note where the code is unknown and 2 is taken.

    FleetError for a code that has none.
    """
    if currency in _NONE.split():
        raise FleetError(
            f"fleet.toml, currency: came {currency}, which has no minor unit (ISO 4217), so that no amount can "
            "be rounded to it; expected the currency that is paid in, such as EUR; correct it before the next call"
        )
    if currency in _TWO.split():
        return 2, None
    for digits, codes in _OTHER.items():
        if currency in codes.split():
            return digits, None
    return 2, f"currency {currency} is not in the table of minor units; amounts have 2 decimals"


def exact(number: float) -> Decimal:
    """A float as the decimal it was meant to be: 12 significant digits, so that binary dust moves no cent."""
    return Decimal(f"{number:.12g}")


def to_minor(amount: Decimal, currency: str) -> Decimal:
    """Rounded half-up (away from zero at the half) to the currency's minor unit."""
    digits, _ = minor_digits(currency)
    return amount.quantize(Decimal(1).scaleb(-digits), rounding=ROUND_HALF_UP)


def told(amount: Decimal, currency: str) -> str:
    """An amount as text with the currency's decimals and no minus before zero; a record keeps four."""
    rounded = to_minor(amount, currency)
    return f"{rounded if rounded else abs(rounded)}"


def largest_remainder(
    parts: Sequence[float], site_ids: Sequence[str], total: Decimal, currency: str
) -> AnyArray:
    """`total` shared out in proportion to `parts` (none negative) in whole minor units that add up to it.

    Each gets its share rounded down; the units left over go to the largest remainders, ties by site id. Parts
    that are all zero share evenly. Returns Decimals of shape (part,).
    """
    digits, _ = minor_digits(currency)
    unit = Decimal(1).scaleb(-digits)
    weights = [exact(part) for part in parts]
    if not any(weights):
        weights = [Decimal(1)] * len(weights)
    whole = sum(weights, Decimal(0))
    ideal = [total * weight / whole / unit for weight in weights]
    floor = [share.to_integral_value(rounding=ROUND_FLOOR) for share in ideal]
    left = int(total / unit - sum(floor, Decimal(0)))
    order = sorted(range(len(parts)), key=lambda at: (floor[at] - ideal[at], site_ids[at]))
    extra = set(order[:left])
    return np.array([(floor[at] + (at in extra)) * unit for at in range(len(parts))], dtype=object)


def performance_factor(
    delivered_kw: Floats,
    committed_kw: Floats,
    counted: Bools,
    step_h: float,
    rule: SettlementRule,
    hour: Ints | None = None,
    netted_kwh: Floats | None = None,
) -> Floats:
    """Delivered over committed energy (site,), by the rule's order of floor, cap and rounding; NaN if undefined.

    Shapes (site, interval); counted: the site's own window; hour (interval,): the hour each interval belongs to,
    for a rule that looks at hours; netted_kwh (site,): see netted. An interval with no value adds nothing.
    Undefined where nothing was committed, no interval has a value, or what is netted is not known.
    """
    known = counted & ~np.isnan(delivered_kw)
    value = np.where(known, delivered_kw, 0.0)
    pledged = np.where(counted, committed_kw, 0.0)
    committed = pledged.sum(axis=1) * step_h
    if rule.performance_by != "interval":
        group = np.zeros(value.shape[1], dtype=np.int64)
        if rule.performance_by == "hour" and hour is not None:
            group = hour - hour.min(initial=0)
        member = group[:, None] == np.arange(group.max(initial=0) + 1)
        value, pledged = value @ member, pledged @ member
    if rule.floor_intervals:
        value = np.maximum(value, 0.0)
    if rule.cap_intervals:
        value = np.minimum(value, pledged)
    off = np.zeros(len(committed)) if netted_kwh is None else netted_kwh
    defined = (committed > 0.0) & known.any(axis=1) & ~np.isnan(off)
    factor = (value.sum(axis=1) * step_h - np.where(defined, off, 0.0)) / np.where(defined, committed, 1.0)
    return np.where(defined, _rounded(factor, rule), np.nan)


def netted(until_midnight_kwh: Floats, until_full_kwh: Floats, rule: SettlementRule) -> Floats:
    """kWh (site,) that the rule takes off what was delivered: what was taken back, at least 0; NaN where not known."""
    if rule.recovery_netting == "none":
        return np.zeros(len(until_midnight_kwh))
    back = until_midnight_kwh if rule.recovery_netting == "until_midnight" else until_full_kwh
    return np.maximum(back, 0.0)


def _rounded(factor: Floats, rule: SettlementRule) -> Floats:
    if rule.performance_decimals is None:
        return factor
    scale = 10.0**rule.performance_decimals
    found: Floats = np.sign(factor) * np.floor(np.round(np.abs(factor) * scale, 6) + 0.5) / scale
    return found


def joint_factor(factor: Floats, committed_kwh: Floats, rule: SettlementRule) -> Floats:
    """The factor of all sites under a portfolio rule together, for each that has one (site,); NaN elsewhere.

    Joint = sum of factor x committed over sum of committed: over-delivery here nets a lack there.
    """
    known = ~np.isnan(factor)
    committed = np.where(known, committed_kwh, 0.0).sum()
    if not known.any() or committed <= 0.0:
        return factor
    joint = np.array([np.where(known, factor * committed_kwh, 0.0).sum() / committed])
    return np.where(known, _rounded(joint, rule)[0], np.nan)


def firm_level_charge(
    metered_kw: Floats, counted: Bools, step_h: float, rule: SettlementRule, sign: float
) -> Floats:
    """Money (site,) for what was metered beyond the rule's firm level in the window; sign +1 shed, -1 absorb.

    An interval with no value adds nothing.
    """
    if rule.firm_level_kw is None:
        return np.zeros(len(metered_kw))
    beyond = np.maximum(sign * (metered_kw - rule.firm_level_kw), 0.0)
    beyond_kwh = np.where(counted & ~np.isnan(metered_kw), beyond, 0.0).sum(axis=1) * step_h
    charge: Floats = beyond_kwh * rule.firm_level_charge_per_kwh
    return charge


def season_factor(
    delivered_kw: Sequence[float], committed_kw: Sequence[float], rule: SettlementRule
) -> float:
    """Factor of a season over all its event hours together, one value per hour, kW; NaN where undefined.

    A mean over hours, not over events: an event of four hours weighs four times one of a single hour.
    """
    delivered, committed = (np.array([list(kw)], dtype=np.float64) for kw in (delivered_kw, committed_kw))
    each = np.ones(delivered.shape, dtype=np.bool_)
    return float(performance_factor(delivered, committed, each, 1.0, rule)[0])


def paid_share(factor: Floats, rule: SettlementRule, prices: Prices) -> Floats:
    """Share of the capacity payment that a performance factor earns (site,); NaN stays NaN.

    proportional: the factor; linear: max(0, 1 - slope (target - factor)); ladder: the rung whose lower bound,
    inclusive, is the highest reached, 0 below the first. Nothing at or below the gate. Then floor and cap.
    """
    known = ~np.isnan(factor)
    value = np.round(np.where(known, factor, 0.0), 12)
    share = value
    if rule.performance_formula == "linear":
        share = np.maximum(0.0, 1.0 - rule.performance_slope * (rule.performance_target - value))
    if rule.performance_formula == "ladder":
        bounds, shares = np.array(rule.ladder).T
        rung = np.searchsorted(bounds, value, side="right") - 1
        share = np.where(rung >= 0, shares[np.maximum(rung, 0)], 0.0)
    floor = prices.performance_floor if rule.performance_floor is None else rule.performance_floor
    cap = prices.performance_cap if rule.performance_cap is None else rule.performance_cap
    share = np.clip(share, floor, cap)
    if rule.performance_gate is not None:
        share = np.where(value > rule.performance_gate, share, 0.0)
    return np.where(known, share, np.nan)


def lines(
    committed_kwh: Floats,
    delivered_kwh: Floats,
    share: Floats,
    prices: Prices,
    firm_charge: Floats | None = None,
) -> Lines:
    """Statement lines of every site; arrays of shape (site,), delivered and share NaN where undefined.

    capacity = price x committed x share; energy = price x max(delivered, 0); penalty = -price x max(committed -
    delivered, 0) - firm_charge, no lack where nothing was committed. Undefined makes a line zero: nothing is
    paid or charged on a value that is not there. Each line is rounded half-up; total is their sum.
    """
    delivered, lack = _delivered_and_lack(committed_kwh, delivered_kwh)
    earned = np.where(np.isnan(share), 0.0, share)
    decimal = np.frompyfunc(exact, 1, 1)
    rounded = np.frompyfunc(lambda amount: to_minor(amount, prices.currency), 1, 1)
    capacity = rounded(decimal(committed_kwh) * decimal(earned) * exact(prices.capacity_payment_per_kwh))
    energy = rounded(decimal(np.maximum(delivered, 0.0)) * exact(prices.energy_payment_per_kwh))
    charge = np.zeros(len(lack)) if firm_charge is None else firm_charge
    # Subtracted from zero, so that no penalty is 0 and not -0.
    penalty = Decimal(0) - rounded(decimal(lack) * exact(prices.penalty_per_kwh) + decimal(charge))
    return Lines(capacity, energy, penalty, capacity + energy + penalty)


def portfolio_lines(
    committed_kwh: Floats,
    delivered_kwh: Floats,
    share: Floats,
    prices: Prices,
    firm_charge: Floats,
    site_ids: Sequence[str],
) -> Lines:
    """Lines of sites settled together: each line is worked out and rounded on their sums, then shared out.

    share (site,) is the joint one, NaN where undefined: those sites stay out. Capacity is shared by committed,
    energy by delivered above zero, the penalty by each site's own lack, left-over units by largest remainder; so
    that the lines of the sites add up to the portfolio's to the cent. Firm-level charges stay with their site.
    """
    known = ~np.isnan(share)
    delivered, lack = _delivered_and_lack(committed_kwh, np.where(known, delivered_kwh, np.nan))
    committed = np.where(known, committed_kwh, 0.0)
    together = _total(committed), _total(delivered)
    paid = exact(float(share[known][0])) if known.any() else Decimal(0)
    due = (
        together[0] * paid * exact(prices.capacity_payment_per_kwh),
        max(together[1], Decimal(0)) * exact(prices.energy_payment_per_kwh),
        max(together[0] - together[1], Decimal(0)) * exact(prices.penalty_per_kwh),
    )
    parts = committed, np.maximum(delivered, 0.0), lack
    capacity, energy, lacking = (
        largest_remainder(part.tolist(), site_ids, to_minor(amount, prices.currency), prices.currency)
        for part, amount in zip(parts, due)
    )
    charge = np.frompyfunc(lambda money: to_minor(exact(money), prices.currency), 1, 1)(firm_charge)
    penalty = Decimal(0) - (lacking + charge)
    return Lines(capacity, energy, penalty, capacity + energy + penalty)


def _total(values: Floats) -> Decimal:
    return sum((exact(value) for value in values.tolist()), Decimal(0))


def _delivered_and_lack(committed_kwh: Floats, delivered_kwh: Floats) -> tuple[Floats, Floats]:
    """Delivered with zero for undefined, and what lacks to the commitment."""
    undefined = np.isnan(delivered_kwh)
    delivered = np.where(undefined, 0.0, delivered_kwh)
    lack = np.where(undefined | (committed_kwh <= 0.0), 0.0, np.maximum(committed_kwh - delivered, 0.0))
    return delivered, lack


def earned(
    committed_kwh: Floats,
    delivered_kwh: Floats,
    factor: Floats,
    firm_charge: Floats,
    rule: SettlementRule,
    prices: Prices,
    site_ids: Sequence[str],
) -> tuple[Floats, Lines]:
    """Paid share (site,) and lines of the sites under one rule, each for itself or as a portfolio.

    factor NaN and delivered NaN: undefined, or a site that is excused.
    """
    if rule.netting == "site":
        share = paid_share(factor, rule, prices)
        return share, lines(committed_kwh, delivered_kwh, share, prices, firm_charge)
    share = paid_share(joint_factor(factor, committed_kwh, rule), rule, prices)
    return share, portfolio_lines(committed_kwh, delivered_kwh, share, prices, firm_charge, site_ids)
