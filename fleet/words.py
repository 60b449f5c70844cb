"""How one plant speaks: its units, its clock, whom it rings, and text made harmless to print.

Owns reading `site_words` ("units=us; clock=12; contact=...; CH-1=north machine; anything else") and putting
numbers and times into the site's words. What an order says is orders.py's.
"""

from collections.abc import Collection, Mapping
from dataclasses import dataclass, field
from datetime import datetime
from typing import Final
from zoneinfo import ZoneInfo

from sites.units import KW_TH_PER_TON, c_to_f

DESK: Final = "your programme desk"
NOTES_LENGTH: Final = 200
DAYS: Final = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
MONTHS: Final = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")

LIMIT_WORDS: Final = {
    "full": "tank full, nothing to absorb",
    "already_on": "no machine capacity to spare, or charging already",
}


@dataclass(frozen=True)
class Words:
    """The words of one site."""

    units: str
    """us or si"""
    contact: str
    notes: str
    """Whatever else stands in site_words, made harmless; empty where nothing does."""
    zone: ZoneInfo
    reference: datetime
    """Times on this local day are told without the day's name, in this moment's UTC offset without a zone."""
    clock: str = "24"
    """24 or 12 hours"""
    tags: Mapping[str, str] = field(default_factory=dict)
    """The plant's own names of its machines and tanks, by unit id"""

    def tag(self, unit_id: str) -> str:
        """What the plant calls a machine or tank, its id where it gave no name."""
        return self.tags.get(unit_id, plain(unit_id))

    def energy(self, kwh_th: float) -> str:
        """Cooling energy with unit: kWh_th or ton-h."""
        return self._with_unit(kwh_th, "kWh_th", "ton-h")

    def cooling(self, kw_th: float) -> str:
        """Cooling power with unit: kW_th or ton."""
        return self._with_unit(kw_th, "kW_th", "ton")

    def temperature(self, celsius: float) -> str:
        """A temperature with unit: degC or degF."""
        return f"{float(c_to_f(celsius)):.1f} degF" if self.units == "us" else f"{celsius:.1f} degC"

    def rise(self, kelvin: float) -> str:
        """A temperature difference with unit: K or degF."""
        return f"{kelvin * 1.8:.1f} degF" if self.units == "us" else f"{kelvin:.1f} K"

    def time(self, at: datetime) -> str:
        """Local time; the day's name before it on another day, the zone after it where its offset differs."""
        local, here = at.astimezone(self.zone), self.reference.astimezone(self.zone)
        day = "" if local.date() == here.date() else f"{DAYS[local.weekday()]} "
        zone = "" if local.utcoffset() == here.utcoffset() else f" {self.zone_name(at)}"
        half = f"{local.hour % 12 or 12}:{local:%M} {'ap'[local.hour // 12]}m"
        hour = f"{local:%H:%M}" if self.clock == "24" else half
        return f"{day}{hour}{zone}"

    def day(self, at: datetime) -> str:
        """Local day in words: Thu 16 Jul 2026."""
        local = at.astimezone(self.zone)
        return f"{DAYS[local.weekday()]} {local.day} {MONTHS[local.month - 1]} {local.year}"

    def zone_name(self, at: datetime) -> str:
        """Zone and offset in force then: EEST (UTC+03:00)."""
        local = at.astimezone(self.zone)
        offset = f"{local:%z}"
        return f"{local:%Z} (UTC{offset[:3]}:{offset[3:5]})"

    def _with_unit(self, value: float, si: str, us: str) -> str:
        number, unit = (value / KW_TH_PER_TON, us) if self.units == "us" else (value, si)
        return f"{number:,.0f} {unit}" if abs(number) >= 99.5 else f"{number:.1f} {unit}"


def words(
    site_words: str | None, zone: ZoneInfo, reference: datetime, unit_ids: Collection[str] = ()
) -> Words:
    """Read the words of a site; a part that is no known word and no unit's id is kept as a note and printed."""
    units, clock, contact, notes = "si", "24", "", []
    tags: dict[str, str] = {}
    for part in (site_words or "").split(";"):
        key, _, value = (piece.strip() for piece in part.partition("="))
        if key.lower() == "units" and value.lower() in ("us", "si"):
            units = value.lower()
        elif key.lower() == "contact" and value:
            contact = plain(value)
        elif key.lower() == "clock" and value in ("12", "24"):
            clock = value
        elif key in unit_ids and value:
            tags[key] = plain(value)
        elif part.strip():
            notes.append(plain(part.strip()))
    said = "; ".join(notes)
    if len(said) > NOTES_LENGTH:
        said = said[:NOTES_LENGTH] + " ... (cut: the rest stands in the table of sites)"
    return Words(units, contact or DESK, said, zone, reference, clock, tags)


def plain(text: str) -> str:
    r"""Text that cannot steer a terminal or a page: what does not print is spelled out, as in \x1b."""
    return "".join(
        letter if letter.isprintable() else letter.encode("unicode_escape").decode("ascii") for letter in text
    )


def limit_words(limit: str) -> str:
    """What keeps a site from giving more, a word of limited_by, told so that it can be read alone."""
    return LIMIT_WORDS.get(limit, limit)
