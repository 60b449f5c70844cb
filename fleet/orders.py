"""Orders: one page for each called site's operator, from the record of the call and nothing else.

Owns what stands on an order; its words besides the steps are advice.py's, numbers and times in the site's own
words are words.py's, the page is the template order.txt.j2. Each line to act on is made of rows of table
call/steps and each row is on a line: `steps_in` gives them back.
"""

import re
import textwrap
from collections.abc import Callable, Iterable
from dataclasses import asdict, dataclass
from datetime import datetime
from functools import cache
from importlib.resources import files
from typing import Any, Final

import jinja2
import pandas as pd

from fleet import advice
from fleet.called import CalledSite, Step, called_sites
from fleet.records import CallRecord
from fleet.seals import json_text
from fleet.words import plain

WIDTH: Final = 80
MOST_LINES: Final = 10
TIME_WIDTH: Final = 10
DONE: Final = "__:__ ____"
NOT_IN_FILE_NAMES: Final = re.compile(r"[^A-Za-z0-9_-]+")
MERGEABLE: Final = (
    ("restart", "recharge_may_start", "full_by", "usual_by"),
    ("off", "inhibit", "demand_limit", "charge_start"),
)


@dataclass(frozen=True)
class Line:
    """One line to act on: local time, what to do to which machine, what is then seen, what if not."""

    time: str
    do: str
    see: str
    if_not: str
    steps: tuple[Step, ...]


@dataclass(frozen=True)
class Order:
    """One order as its page says it; every time in text is local, every number in the site's units."""

    number: str
    revision: int
    replaces: int | None
    event_id: str
    site_id: str
    quote_id: str
    purpose: str
    direction: str
    banner: str
    title: str
    start: str
    period: str
    window_start: datetime
    window_end: datetime
    units: str
    contact: str
    notes: str
    before: tuple[str, ...]
    lines: tuple[Line, ...]
    stop: tuple[str, ...]
    restart: str
    recharge: str
    cautions: tuple[str, ...]


def orders(record: CallRecord) -> list[Order]:
    """One order per called site, sorted by site; reads request, windows, steps and the frozen rows.

    frozen: sites, chillers, tanks; frozen_json["settings"]: timezone. FleetError where the record lacks a row.
    """
    request = record.frames["request"].iloc[0]
    replaces = None if pd.isna(request["supersedes"]) else int(request["supersedes"])
    return [
        _order(site, number, record, str(request["purpose"]), str(request["direction"]), replaces)
        for number, site in enumerate(called_sites(record), start=1)
    ]


def text(order: Order) -> str:
    """The order as a page of plain text, at most 80 columns wide, with no control character in it."""
    return _template().render(order=order)


def as_json(order: Order) -> dict[str, Any]:
    """The order as plain data: times as ISO 8601 in UTC."""
    found: dict[str, Any] = _no_datetimes(asdict(order))
    return found


def steps_in(order: Order) -> list[Step]:
    """Every step that stands on a line of the order, in the order of its lines."""
    return [step for line in order.lines for step in line.steps]


def order_files(record: CallRecord) -> dict[str, str]:
    """Files of an event's orders by name: a page per called site, and orders.json with all of them."""
    made = orders(record)
    pages = {f"{file_stem(order)}.txt": text(order) for order in made}
    return {**pages, "orders.json": json_text([as_json(order) for order in made])}


def file_stem(order: Order) -> str:
    """Number and site in characters every file system takes; the number keeps two sites apart."""
    return f"{order.number.rsplit('/', 1)[1]}-{NOT_IN_FILE_NAMES.sub('_', order.site_id)[:60]}"


def _order(
    site: CalledSite, number: int, record: CallRecord, purpose: str, direction: str, replaces: int | None
) -> Order:
    window, say = site.window, site.words
    start, end = window.window_start.to_pydatetime(), window.window_end.to_pydatetime()
    what = "shed load" if direction == "shed" else "take up load"
    return Order(
        number=f"{record.event_id}/{number:03d}",
        revision=record.revision,
        replaces=replaces,
        event_id=record.event_id,
        site_id=plain(window.site_id),
        quote_id=plain(window.quote_id),
        purpose=purpose,
        direction=direction,
        banner=advice.BANNERS[purpose],
        title=f"{what}, {say.day(start)}",
        start=say.time(start),
        period=f"{say.time(start)} to {say.time(end)}, {say.zone_name(start)}",
        window_start=start,
        window_end=end,
        units=say.units,
        contact=say.contact,
        notes=say.notes,
        before=advice.before(site),
        lines=_lines(site),
        stop=advice.stop(site),
        restart=advice.restart(site),
        recharge=advice.recharge(site),
        cautions=advice.cautions(site),
    )


def _lines(site: CalledSite) -> tuple[Line, ...]:
    """Lines to act on: one per moment and action; where that gives over MOST_LINES, moments of an action join.

    Eight actions of a shed exist and seven of an absorb, so that joined lines are never more than MOST_LINES.
    """
    joined: tuple[str, ...] = ()
    for more in ((), *MERGEABLE, ("demand_limit_removed", "inhibit_removed")):
        joined = (*joined, *more)
        groups = _groups(site.steps, joined)
        if len(groups) <= MOST_LINES:
            break
    return tuple(_line(site, group) for group in groups)


def _groups(steps: Iterable[Step], joined: tuple[str, ...]) -> list[list[Step]]:
    groups: dict[tuple[Any, str], list[Step]] = {}
    for step in steps:
        key = None if step.action in joined else step.at
        groups.setdefault((key, step.action), []).append(step)
    return sorted(groups.values(), key=lambda group: group[0].at)


def _line(site: CalledSite, steps: list[Step]) -> Line:
    """One line from steps of one action."""
    moments = sorted({step.at for step in steps})
    tags = ", ".join(_tag(site, step, len(moments) > 1) for step in steps)
    do, see, if_not = advice.phrase(site, steps[0].action)
    return Line(site.words.time(moments[0]), do.format(tags=tags), see, if_not, tuple(steps))


def _tag(site: CalledSite, step: Step, timed: bool) -> str:
    """A machine's or tank's tag with the step's value, and its time where the line holds several."""
    tag, value = site.words.tag(step.unit_id), step.value
    if value is not None and step.action in ("demand_limit", "demand_limit_removed"):
        tag += f" to {100.0 * value:g} %"
    elif value is not None and step.action == "charge_start":
        tag += f" up to {site.words.cooling(value)}"
    elif value is not None and step.action == "charge_to":
        tag += f" to about {site.words.energy(value)}"
    elif value is not None and step.action == "recharge_may_start":
        tag += f" at most {site.words.cooling(value)}"
    elif value is not None and step.action in ("full_by", "usual_by"):
        tag += f" at {site.words.energy(value)}"
    return f"{tag} {site.words.time(step.at)}" if timed else tag


def _no_datetimes(value: Any) -> Any:
    if isinstance(value, datetime):
        return value.isoformat().replace("+00:00", "Z")
    if isinstance(value, dict):
        return {key: _no_datetimes(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_no_datetimes(item) for item in value]
    return value


def wrapped(said: str, first: str = "", rest: str = "", width: int = WIDTH) -> str:
    """`said` wrapped to `width`, the first row led by `first`, the others by `rest`."""
    return textwrap.fill(said, width, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False)


def row(line: Line) -> str:
    """A line to act on as rows of the page: time, what to do, room for time done and initials, what is seen."""
    width = max(TIME_WIDTH, len(line.time) + 1)
    do = textwrap.wrap(line.do, WIDTH - width - len(DONE) - 2, break_on_hyphens=False) or [""]
    lead = " " * width
    head = f"{line.time:<{width}}{do[0]}"
    rows = [f"{head:<{WIDTH - len(DONE)}}{DONE}", *(lead + more for more in do[1:])]
    rows.append(wrapped(f"see: {line.see}. If not: {line.if_not}.", lead, lead))
    return "\n".join(rows)


@cache
def _template() -> jinja2.Template:
    """The page, read once; a name it does not know is an error, never an empty space."""
    environment = jinja2.Environment(
        undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True, keep_trailing_newline=True
    )
    filters: dict[str, Callable[..., str]] = {"wrapped": wrapped, "row": row}
    environment.filters.update(filters)
    return environment.from_string(files("fleet").joinpath("order.txt.j2").read_text(encoding="utf-8"))
