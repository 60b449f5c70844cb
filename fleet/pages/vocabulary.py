"""The one small vocabulary: how pages name what the record's columns and closed lists hold.

Owns words only. A term used on a page is a key of TERMS, so that its foot can say what it means.
"""

from typing import Final

from fleet.words import plain

TERMS: Final = {
    "asked": "kW requested at the node, in every interval of the event",
    "expected": "what the site models say the called sites give, at the node",
    "promised": "what the fleet is relied on for at the stated probability; where none was asked, the expected",
    "committed": "what a site is held to: the expected inside its own window, at its meter",
    "delivered": "adjusted baseline less meter, in the event's direction",
    "usual": "the cooling plant with this event not called",
    "event case": "the cooling plant with this event carried out, recovery included",
    "window": "from a site's first machine off to its last machine free to come back",
    "recovery": "what is drawn after the window because of the event",
    "kW, kWh": "electric",
    "kW_th, kWh_th": "cooling; ton and ton-h where a site speaks US units",
}
DIRECTION: Final = {"shed": "Shed", "absorb": "Absorb"}
LESS_OR_MORE: Final = {"shed": "not drawn", "absorb": "drawn early"}
LATER: Final = {"shed": "drawn later", "absorb": "not drawn later"}
MINUS: Final = {
    "shed": "energy not used by day is dearer than what its recovery takes at night",
    "absorb": "energy taken now is cheaper than what need not be drawn later",
}
PURPOSE: Final = {"real": "real event", "test": "test event", "rehearsal": "rehearsal"}
LIMITED_BY: Final = {
    "none": "nothing: no limit is reached",
    "already_off": "its machines are off anyway",
    "already_on": "its machines run at full already",
    "inventory": "what the tank holds",
    "discharge_rate": "how fast the tank gives",
    "comfort": "how warm the rooms may get",
    "minimum_run": "the machines' least times on and off",
    "availability": "a machine or tank out of service",
    "held_back": "inventory held back by the site",
    "recovery": "the tank would not be back in time",
    "notice": "too little notice",
    "call_limit": "its calls are used up",
    "full": "the tank is full",
}
COST_PARTS: Final = {
    "cost_before": "energy before the window",
    "cost_during": "energy in the window",
    "cost_recovery": "energy of the recovery",
    "cost_demand": "demand charge",
    "cost_fee": "call fees",
    "cost_comfort": "comfort payments",
}
QUALITY: Final = {
    "measured": "measured",
    "edited": "edited",
    "estimated_line": "estimated, straight line",
    "estimated_like_day": "estimated, like days",
    "missing": "missing",
}
STATE: Final = {
    "final": "final",
    "provisional": "provisional: something is estimated",
    "no_baseline": "no baseline",
    "meter_missing": "meter missing",
    "excused": "excused",
}
REASON: Final = {
    "used": "used",
    "event_day": "the event's day",
    "other_day_type": "other kind of day",
    "holiday": "holiday",
    "event_past": "had an event",
    "day_before_event": "the day before the event",
    "outage": "outage",
    "low_usage": "low usage",
    "missing_data": "readings missing",
    "missing_weather": "weather missing",
    "beyond_look_back": "too long ago",
    "not_ranked": "not among the highest",
    "enough_days": "enough later days",
    "too_few_days": "too few days",
}
STATUS: Final = {
    "proven": "proven the cheapest within the solver's tolerance",
    "feasible_gap": "the gap is known and small",
    "feasible_cut_short": "the search was cut short; the gap is what it is",
}
BOUND_BY: Final = {"prices": "by prices alone", "solver": "by the solver"}


def word(of: dict[str, str], key: object) -> str:
    """The page's word for a key; a key that is not in the vocabulary is shown as it is, spaces for underscores."""
    return of.get(str(key), plain(str(key)).replace("_", " "))
