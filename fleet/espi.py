"""The open interval-data feed, NAESB REQ.21 (ESPI): Atom XML with usage points, readings and their types.

Owns parsing without entities, following the link graph (never the order of the document), units, multipliers,
direction and quality. Leaves the fleet's grid and the names of meters to meter_files.py. Code lists of the
standard (units, accumulation, quality) are from memory of IEC 61968-9 as REQ.21 uses them.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final
from xml.etree.ElementTree import Element, TreeBuilder
from xml.parsers import expat

import pandas as pd

from fleet.errors import FleetError, Problem, Refused

ATOM: Final = "{http://www.w3.org/2005/Atom}"
ESPI: Final = "{http://naesb.org/espi}"
WATT_HOURS, WATTS = 72, 38
IMPORT, EXPORT = 1, 19
ELECTRICITY: Final = 0
BULK: Final = {1: "bulk quantity", 2: "continuous cumulative", 3: "cumulative"}
QUALITY: Final = {
    0: "measured",
    7: "edited",
    8: "estimated_like_day",
    9: "estimated_line",
    11: "edited",
    14: "measured",
    17: "measured",
    18: "measured",
    19: "measured",
}
"""Every other code (questionable, projected, mixed, ...) is no reading: estimated_like_day."""
RANK: Final = ("measured", "edited", "estimated_line", "estimated_like_day", "missing")


@dataclass(frozen=True)
class _Entry:
    """An Atom entry: its resource's kind and content, and its links."""

    kind: str
    content: Element
    title: str
    own: str
    up: str
    related: tuple[str, ...]


@dataclass
class _Type:
    """What a ReadingType says of its values."""

    uom: int
    factor: float
    length_s: int
    direction: int
    default_quality: int
    faults: list[tuple[str, str, str, str]] = field(default_factory=list)


def read_feed(path: Path) -> pd.DataFrame:
    """Readings of a feed: usage_point, title, interval_start (UTC), seconds, kw (import positive), quality.

    kWh = value x 10^multiplier / 1000 for Wh; for W multiplied by the interval in hours too. Export counts
    negative, and import and export of one usage point are summed. Raises FleetError for a file that is no such
    XML or declares a document type or entities, Refused (all at once) for gas, bulk readings and other units.
    """
    entries = _entries(_parse(path), path)
    points = [entry for entry in entries if entry.kind == "UsagePoint"]
    types = {entry.own: entry for entry in entries if entry.kind == "ReadingType"}
    blocks = [entry for entry in entries if entry.kind == "IntervalBlock"]
    problems: list[Problem] = []
    rows: list[dict[str, object]] = []
    for reading in (entry for entry in entries if entry.kind == "MeterReading"):
        point = _point_of(reading, points)
        of = next((types[link] for link in reading.related if link in types), None)
        if point is None or of is None:
            came = f"meter reading {reading.own} with no " + ("usage point" if point is None else "type")
            expected = "links to its usage point and its reading type"
            problems.append(Problem(path.name, None, "link", came, expected, "ask for a whole feed"))
            continue
        told, faults = _type(of.content, path), _service(point, path)
        faults += [Problem(path.name, None, *fault) for fault in told.faults]
        problems += faults
        if faults:
            continue
        own = [block for block in blocks if _belongs(block, reading)]
        rows += [row for block in own for row in _rows(block, told, point)]
    if problems:
        raise Refused(problems)
    if not rows:
        raise FleetError(f"{path.name}: holds no interval readings; export the feed with its IntervalBlocks")
    return _both_ways(pd.DataFrame(rows), path)


def _parse(path: Path) -> Element:
    """The document; a document type (and with it every entity) is refused before it is read."""
    builder = TreeBuilder()
    parser = expat.ParserCreate(namespace_separator="}")
    parser.buffer_text = True

    def refuse(*_: object) -> None:
        raise FleetError(
            f"{path.name}: declares a document type, which can hold entities that swell without end; "
            "an interval-data feed needs none: export it again without <!DOCTYPE>"
        )

    parser.StartDoctypeDeclHandler = refuse
    parser.EntityDeclHandler = refuse
    # The names ElementTree searches by: {namespace}name.
    parser.StartElementHandler = lambda tag, given: builder.start("{" * ("}" in tag) + tag, given)
    parser.EndElementHandler = lambda tag: builder.end("{" * ("}" in tag) + tag)
    parser.CharacterDataHandler = builder.data
    try:
        parser.Parse(path.read_bytes(), True)
    except expat.ExpatError as error:
        raise FleetError(f"{path.name}: is not well-formed XML ({error}); export it again") from error
    except OSError as error:
        raise FleetError(f"{path.name}: cannot be read ({error.strerror}); check that it is there") from error
    return builder.close()


def _entries(root: Element, path: Path) -> list[_Entry]:
    if root.tag not in (f"{ATOM}feed", f"{ATOM}entry"):
        raise FleetError(
            f"{path.name}: is XML, but no Atom feed (came <{root.tag.split('}')[-1]}>); expected interval data "
            "by NAESB REQ.21 (ESPI)"
        )
    found = []
    for entry in root.iter(f"{ATOM}entry"):
        links: dict[str, list[str]] = {}
        for link in entry.findall(f"{ATOM}link"):
            links.setdefault(link.get("rel", ""), []).append(link.get("href", "").rstrip("/"))
        content = entry.find(f"{ATOM}content")
        for part in content if content is not None else ():
            name = entry.findtext(f"{ATOM}title", "").strip()
            own, up = (links.get(rel, [""])[0] for rel in ("self", "up"))
            found.append(
                _Entry(part.tag.split("}")[-1], part, name, own, up, tuple(links.get("related", ())))
            )
    return found


def _point_of(reading: _Entry, points: list[_Entry]) -> _Entry | None:
    """The usage point that names the reading, or the collection it stands in, among its related links."""
    return next((p for p in points if reading.up in p.related or reading.own in p.related), None)


def _belongs(block: _Entry, reading: _Entry) -> bool:
    return block.up in reading.related or block.own in reading.related


def _number(element: Element, name: str, default: int) -> int:
    text = element.findtext(f"{ESPI}{name}")
    try:
        return default if text is None or not text.strip() else int(text)
    except ValueError as error:
        raise FleetError(f"{name}: came {text!r}; expected a whole number; export the feed again") from error


def _service(point: _Entry, path: Path) -> list[Problem]:
    category = point.content.find(f"{ESPI}ServiceCategory")
    kind = ELECTRICITY if category is None else _number(category, "kind", ELECTRICITY)
    if kind == ELECTRICITY:
        return []
    came = f"{kind}{' (gas)' if kind == 1 else ''} at usage point {_last(point.own)}"
    advice = "take its readings out of the feed"
    return [Problem(path.name, None, "ServiceCategory", came, "0 (electricity)", advice)]


def _type(content: Element, path: Path) -> _Type:
    uom, power = _number(content, "uom", 0), _number(content, "powerOfTenMultiplier", 0)
    accumulation = _number(content, "accumulationBehaviour", 4)
    told = _Type(
        uom=uom,
        factor=10.0**power / 1000.0,
        length_s=_number(content, "intervalLength", 0),
        direction=_number(content, "flowDirection", IMPORT),
        default_quality=_number(content, "defaultQuality", 0),
    )
    if uom not in (WATT_HOURS, WATTS):
        advice = "ask for interval data in Wh or W"
        told.faults.append(("uom", str(uom), f"{WATT_HOURS} (Wh) or {WATTS} (W)", advice))
    if accumulation in BULK:
        came = f"{accumulation} ({BULK[accumulation]})"
        advice = "register readings are no interval data; ask for deltas"
        told.faults.append(("accumulationBehaviour", came, "4 (delta data)", advice))
    if told.direction not in (IMPORT, EXPORT):
        expected = f"{IMPORT} (import) or {EXPORT} (export)"
        told.faults.append(("flowDirection", str(told.direction), expected, "ask for one of them"))
    return told


def _rows(block: _Entry, told: _Type, point: _Entry) -> Iterator[dict[str, object]]:
    """Readings of one block; a reading without a period follows the one before it."""
    interval = block.content.find(f"{ESPI}interval")
    next_start = 0 if interval is None else _number(interval, "start", 0)
    for reading in block.content.findall(f"{ESPI}IntervalReading"):
        period = reading.find(f"{ESPI}timePeriod")
        start = next_start if period is None else _number(period, "start", next_start)
        seconds = told.length_s if period is None else _number(period, "duration", told.length_s)
        next_start = start + seconds
        text = (reading.findtext(f"{ESPI}value") or "").strip()
        if seconds <= 0:
            raise FleetError(
                f"interval reading at {start}: has no duration, and its type no intervalLength; "
                "export the feed again"
            )
        codes = [
            _number(quality, "quality", told.default_quality)
            for quality in reading.findall(f"{ESPI}ReadingQuality")
        ] or [told.default_quality]
        names = [QUALITY.get(code, "estimated_like_day") for code in codes]
        kw = float("nan")
        if text:
            kw = int(text) * told.factor * (3600.0 / seconds if told.uom == WATT_HOURS else 1.0)
        yield {
            "usage_point": _last(point.own),
            "title": point.title,
            "interval_start": pd.Timestamp(start, unit="s", tz="UTC"),
            "seconds": seconds,
            "kw": kw if told.direction == IMPORT else -kw,
            "quality": max(names, key=RANK.index) if text else "missing",
            "direction": told.direction,
        }


def _both_ways(rows: pd.DataFrame, path: Path) -> pd.DataFrame:
    """Import and export of each usage point summed; doubles that agree are dropped, others refused."""
    key = ["usage_point", "interval_start", "direction"]
    rows = rows.drop_duplicates()
    twice = rows[rows.duplicated([*key, "seconds"], keep=False)].sort_values(key)
    if len(twice):
        first, second = twice.iloc[0], twice.iloc[1]
        came = f"{first['kw']:g} and {second['kw']:g} kW at {first['interval_start']:%Y-%m-%dT%H:%MZ}"
        advice = "take the block that does not hold out of the feed"
        raise Refused([Problem(path.name, None, "IntervalReading", came, "one value per interval", advice)])
    ways = rows.groupby("usage_point")["direction"].transform("nunique")
    group = rows.assign(ways=ways, rank=rows["quality"].map(RANK.index)).groupby(
        ["usage_point", "title", "interval_start", "seconds"], as_index=False
    )
    found = group.agg(
        kw=("kw", lambda kw: kw.sum(skipna=False)),
        rank=("rank", "max"),
        there=("direction", "size"),
        ways=("ways", "first"),
    )
    # One direction without the other is a gap, not a zero.
    gap = found["there"] < found["ways"]
    found.loc[gap, "kw"] = float("nan")
    found["quality"] = found["rank"].map(dict(enumerate(RANK))).where(found["kw"].notna(), "missing")
    return found.drop(columns=["rank", "there", "ways"]).astype(
        {"interval_start": "datetime64[us, UTC]", "usage_point": object, "title": object, "quality": object}
    )


def _last(link: str) -> str:
    return link.rsplit("/", 1)[-1]
