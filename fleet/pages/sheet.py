"""A page put together: the template environment, tables, and how numbers and times are written.

Owns the frame that every page stands in (base.html.j2) and its parts (parts.html.j2). What stands on a page is
said by the file of that page.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from decimal import Decimal
from functools import cache
from importlib.resources import files
from typing import Any, Final

import jinja2
import numpy as np
import pandas as pd
from markupsafe import Markup, escape

from fleet.money import told
from fleet.pages import figures, vocabulary
from fleet.words import DAYS, MONTHS, plain

NOTHING: Final = "–"
LONG_NAME: Final = 120


@dataclass(frozen=True)
class Fact:
    """One field of the title block."""

    name: str
    value: str
    more: str = ""


@dataclass(frozen=True)
class Link:
    """A page or file that another page leads to; `here`: the page itself."""

    name: str
    href: str
    here: bool = False


@dataclass(frozen=True)
class Table:
    """Rows under heads; kinds: "" text, "n" number, "w" short text, "cell" a graphic. First column: the row's name."""

    caption: str
    heads: Sequence[tuple[str, str]]
    rows: Sequence[Sequence[Any]]
    """A row of one cell alone is the heading of a group"""
    foot: Sequence[Any] = field(default=())


@dataclass(frozen=True)
class Figure:
    """A chart with its key and its numbers."""

    title: str
    said: str
    svg: Markup
    key: Sequence[tuple[str, Markup]]
    table: Table


def figure(chart: figures.Chart, names: str = "") -> Figure:
    """A chart over time with its key and table; `names`: what the filled area is called."""
    heads, rows = figures.numbers(chart)
    kinds = [(heads[0], "w"), *[(head, "n") for head in heads[1:]]]
    key = [(series.name, figures.swatch(series.look)) for series in chart.series]
    if chart.filled is not None and names:
        key.append((names, figures.swatch(f"{chart.filled[2]} soft", filled=True)))
    table = Table(f"Numbers of “{chart.title}”", kinds, rows)
    return Figure(chart.title, chart.said, figures.chart_svg(chart), key, table)


def curve_figure(curve: figures.Curve, table: Table) -> Figure:
    """A curve with its key and a table of its own."""
    key = [(name, figures.swatch(look)) for name, look, _, _ in curve.points]
    key += [(name, figures.mark_swatch(look, place)) for place, (name, look, _, _) in enumerate(curve.marked)]
    return Figure(curve.title, curve.said, figures.curve_svg(curve), key, table)


def page(template: str, **said: Any) -> str:
    """One whole page: `said` is what its template names; every text is escaped."""
    return environment().get_template(template).render(**said)


@cache
def environment() -> jinja2.Environment:
    """Templates of this folder; a name they do not know is an error, never an empty space."""
    made = jinja2.Environment(
        loader=jinja2.PackageLoader("fleet.pages", "."),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    style = files("fleet.pages").joinpath("style.css").read_text(encoding="utf-8")
    made.globals |= {"style": Markup(style), "terms": vocabulary.TERMS}
    made.filters |= {"name": name, "capitalize_first": lambda text: text[:1].upper() + text[1:]}
    return made


def name(text: object) -> Markup:
    """An id or any text of the fleet's own: what steers is spelled out, its direction kept to itself."""
    return Markup("<bdi>{}</bdi>").format(escape(plain(str(text))))


def short(text: str) -> str:
    """A name at a length that titles and file lists bear."""
    said = plain(text)
    return said if len(said) <= LONG_NAME else f"{said[:LONG_NAME]}..."


def number(value: Any, digits: int = 0) -> str:
    """A number with thousands apart; a dash where there is none, no minus before zero."""
    if value is None or value is pd.NA or not np.isfinite(float(value)):
        return NOTHING
    said = f"{float(value):,.{digits}f}"
    return said.lstrip("-") if not said.strip("-0.,") else said.replace("-", "−")


def money(amount: Decimal, currency: str) -> str:
    """An exact amount with the currency's decimals and thousands apart."""
    return f"{Decimal(told(amount, currency)):,}".replace("-", "−")


def percent(value: Any, digits: int = 0) -> str:
    """A fraction as per cent."""
    said = number(None if value is None else 100.0 * float(value), digits)
    return said if said == NOTHING else f"{said} %"


def day(at: pd.Timestamp) -> str:
    """A local day: Wed 15 Jul 2026."""
    return f"{DAYS[at.weekday()]} {at.day} {MONTHS[at.month - 1]} {at.year}"


def clock(at: Any, zone: str, beside: pd.Timestamp | None = None) -> str:
    """Local time of a UTC time, 16:00; with its day where that is not `beside`'s; a dash where there is none."""
    if at is None or pd.isna(at):
        return NOTHING
    local = pd.Timestamp(at).tz_convert(zone)
    if beside is None or beside.tz_convert(zone).date() == local.date():
        return f"{local:%H:%M}"
    return f"{DAYS[local.weekday()]} {local:%H:%M}"


def stamp(at: Any, zone: str) -> str:
    """Local day and time with the zone: Wed 15 Jul 2026 16:00 EEST."""
    local = pd.Timestamp(at).tz_convert(zone)
    return f"{day(local)} {local:%H:%M} {local:%Z}"


def sentence(parts: Iterable[str]) -> str:
    """Texts joined by commas and an `and`."""
    said = [part for part in parts if part]
    return said[0] if len(said) == 1 else ", ".join(said[:-1]) + f" and {said[-1]}" if said else ""
