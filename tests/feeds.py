"""Interval-data feeds by NAESB REQ.21 (ESPI) as the standard writes them, small enough to reckon by hand."""

HEAD = '<feed xmlns="http://www.w3.org/2005/Atom" xmlns:espi="http://naesb.org/espi">'
START = 1752159600
"""2025-07-10T15:00Z"""


def usage_point(number: str = "01", title: str = "House", kind: int = 0) -> str:
    """A usage point and the link to its meter readings."""
    return f"""<entry><link rel="self" href="/RetailCustomer/9/UsagePoint/{number}"/>
<link rel="related" href="/RetailCustomer/9/UsagePoint/{number}/MeterReading"/><title>{title}</title>
<content><espi:UsagePoint><espi:ServiceCategory><espi:kind>{kind}</espi:kind></espi:ServiceCategory>
</espi:UsagePoint></content></entry>"""


def meter_reading(number: str = "1", of: str = "7", point: str = "01") -> str:
    """A meter reading with links up to its point, to its blocks and to its type."""
    base = f"/RetailCustomer/9/UsagePoint/{point}/MeterReading"
    return f"""<entry><link rel="self" href="{base}/{number}"/><link rel="up" href="{base}"/>
<link rel="related" href="{base}/{number}/IntervalBlock"/><link rel="related" href="/ReadingType/{of}"/>
<content><espi:MeterReading/></content></entry>"""


def reading_type(
    number: str = "7",
    uom: int = 72,
    power: int = 0,
    accumulation: int = 4,
    direction: int = 1,
    length_s: int = 900,
) -> str:
    """What the values mean."""
    return f"""<entry><link rel="self" href="/ReadingType/{number}"/><content><espi:ReadingType>
<espi:accumulationBehaviour>{accumulation}</espi:accumulationBehaviour>
<espi:flowDirection>{direction}</espi:flowDirection><espi:intervalLength>{length_s}</espi:intervalLength>
<espi:powerOfTenMultiplier>{power}</espi:powerOfTenMultiplier><espi:uom>{uom}</espi:uom>
</espi:ReadingType></content></entry>"""


def block(
    values: list[int | None],
    number: str = "1",
    reading: str = "1",
    start: int = START,
    seconds: int = 900,
    quality: dict[int, int] | None = None,
    point: str = "01",
) -> str:
    """Interval readings one after another; None = no value."""
    base = f"/RetailCustomer/9/UsagePoint/{point}/MeterReading/{reading}/IntervalBlock"
    rows = []
    for at, value in enumerate(values):
        code = (quality or {}).get(at)
        told = (
            ""
            if code is None
            else f"<espi:ReadingQuality><espi:quality>{code}</espi:quality></espi:ReadingQuality>"
        )
        amount = "" if value is None else f"<espi:value>{value}</espi:value>"
        rows.append(
            f"<espi:IntervalReading>{told}<espi:timePeriod><espi:duration>{seconds}</espi:duration>"
            f"<espi:start>{start + at * seconds}</espi:start></espi:timePeriod>{amount}</espi:IntervalReading>"
        )
    return f"""<entry><link rel="self" href="{base}/{number}"/><link rel="up" href="{base}"/>
<content><espi:IntervalBlock><espi:interval><espi:duration>{seconds * len(values)}</espi:duration>
<espi:start>{start}</espi:start></espi:interval>{"".join(rows)}</espi:IntervalBlock></content></entry>"""


def feed(*entries: str) -> str:
    """A whole feed."""
    return f'<?xml version="1.0" encoding="UTF-8"?>\n{HEAD}{"".join(entries)}</feed>'
