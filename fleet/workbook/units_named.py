"""Units as people write them in headings, and the factors to ours.

Owns the words of units and their conversion at the door; inside, units stand in the names of columns.
"""

import re
from dataclasses import dataclass
from typing import Final

from sites.units import KW_TH_PER_TON

KW_PER_KBTUH: Final = 0.29307107
"""1 000 Btu/h (international table Btu, 1 055.05585 J) in kW."""
M2_PER_FT2: Final = 0.09290304
"""Exact: (0.3048 m)^2."""
BTU_PER_WH: Final = 3.412142
"""EER over COP: Btu/h per W."""


@dataclass(frozen=True)
class Conversion:
    """ours = scale x value + offset, or scale / value."""

    scale: float = 1.0
    offset: float = 0.0
    is_inverse: bool = False

    def ours(self, value: float) -> float:
        """The value in our unit; ZeroDivisionError where an inverse of 0 is asked."""
        return self.scale / value if self.is_inverse else self.scale * value + self.offset

    def words(self, heading: str) -> str:
        """The conversion of a heading's values, for people."""
        if self.is_inverse:
            return f"{self.scale:.7g} / {heading}"
        plus = f" {self.offset:+.6g}" if self.offset else ""
        return f"{heading} x {self.scale:.7g}{plus}"


_COOLING: Final = {
    "kW": Conversion(),
    "MW": Conversion(1000.0),
    "ton": Conversion(KW_TH_PER_TON),
    "kBtu/h": Conversion(KW_PER_KBTUH),
}
_COLD: Final = {"kWh": Conversion(), "MWh": Conversion(1000.0), "ton-h": Conversion(KW_TH_PER_TON)}
ACCEPTED: Final[dict[str, dict[str, Conversion]]] = {
    "kW_th": _COOLING,
    "kWh_th": _COLD,
    "kW": {"kW": Conversion(), "MW": Conversion(1000.0), "W": Conversion(0.001)},
    "m2": {"m2": Conversion(), "ft2": Conversion(M2_PER_FT2)},
    "degC": {"degC": Conversion(), "degF": Conversion(1.0 / 1.8, -32.0 / 1.8)},
    "money/kWh": {"/kWh": Conversion(), "/MWh": Conversion(0.001), "cent/kWh": Conversion(0.01)},
    "ton": {"ton": Conversion()},
    "ton-h": {"ton-h": Conversion()},
    "COP": {
        "COP": Conversion(),
        "kW/ton": Conversion(KW_TH_PER_TON, is_inverse=True),
        "EER": Conversion(1.0 / BTU_PER_WH),
    },
    "h": {"h": Conversion(), "min": Conversion(1.0 / 60.0)},
    "min": {"min": Conversion(), "h": Conversion(60.0)},
    "%": {"%": Conversion()},
}
"""By our unit: the units that may be given. Any other unit of ours is taken as it stands."""
MUST_BE_SAID: Final = ("kW_th", "kWh_th", "kW", "m2", "degC", "money/kWh", "COP")
"""Our units in which a bare number could as well be in another unit of the trade."""

_WORDS: Final = {
    "kW": "kw;kwth;kwr;kwt;kw th;kw thermal;kw electric;kilowatt;kilowatts",
    "MW": "mw;mwth;mw th;megawatt;megawatts",
    "W": "watt;watts",
    "ton": "ton;tons;tr;rt;tons of refrigeration;refrigeration tons;ton refrigeration;us tons",
    "kBtu/h": "mbh;kbtu/h",
    "kWh": "kwh;kwhth;kwh th;kwh thermal",
    "MWh": "mwh;mwhth;mwh th",
    "ton-h": "tonh;trh;rth;ton h;tons h;ton hr;ton hrs;ton hour;ton hours;tonhour;tonhours",
    "m2": "m2;sqm;sq m;square metres;square meters",
    "ft2": "ft2;sqft;sf;sq ft;square feet",
    "degC": "c;degc;deg c;celsius",
    "degF": "f;degf;deg f;fahrenheit",
    "K": "k;kelvin",
    "%": "%;pct;percent;per cent",
    "h": "h;hr;hrs;hour;hours",
    "min": "min;mins;minute;minutes",
    "kW/ton": "kw/ton;kw/tr;kw per ton",
    "EER": "eer",
    "COP": "cop",
    "cent/kWh": "ct/kwh;c/kwh;cent/kwh;cents/kwh;cents per kwh;cent per kwh",
    "/kWh": "/kwh;per kwh",
    "/MWh": "/mwh;per mwh",
    "/kW": "/kw;per kw",
}
_UNIT_OF: Final = {word: unit for unit, words in _WORDS.items() for word in words.split(";")}
_LONGEST: Final = 3
"""Words of the longest unit."""
_MONEY: Final = re.compile(r"^(?:[a-z]{3}|money|[$€£]) ?(?=/|per )")
_BRACKETS: Final = re.compile(r"[(\[{]([^)\]}]*)[)\]}]")


def unit_of(text: str) -> str | None:
    """The unit a text names, None where it names none."""
    words = _MONEY.sub("", plain_words(text))
    return _UNIT_OF.get(words)


def plain_words(text: str) -> str:
    """Lower case, one space between words, signs written out or gone: what two spellings have in common."""
    lowered = text.lower().replace("²", "2").replace("°", " deg ")
    return " ".join(re.sub(r"[^\w/%$€£]+|_", " ", lowered).split())


def parted(heading: str) -> tuple[str, str | None]:
    """A heading's words without its unit, and the unit it names, in brackets or at its end, or None."""
    for found in _BRACKETS.finditer(heading):
        unit = unit_of(found.group(1))
        if unit is not None:
            return plain_words(heading[: found.start()] + " " + heading[found.end() :]), unit
    words = plain_words(heading).split()
    for count in range(min(_LONGEST, len(words) - 1), 0, -1):
        unit = unit_of(" ".join(words[-count:]))
        if unit is not None:
            rest = words[:-count]
            rest = (
                rest[:-1]
                if len(rest) > 1 and (rest[-1] == "in" or _MONEY.match(f"{rest[-1]} per "))
                else rest
            )
            return " ".join(rest), unit
    return " ".join(words), None


def accepted(our_unit: str) -> dict[str, Conversion]:
    """Units that may be given for one of ours; of a unit without a list, itself alone."""
    return ACCEPTED.get(our_unit, {our_unit: Conversion()})
