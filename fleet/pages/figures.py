"""Charts as inline SVG: lines and steps over time or numbers, bars and timelines in table cells.

Owns shapes only: what is drawn, in which class of the style sheet. The numbers of a chart stand in a table beside
it (see `numbers`); colours, dashes and type are style.css's.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd
from markupsafe import Markup, escape

from fleet.pages.scale import Scale, hour_ticks, micros, value_scale
from sites.units import Floats, Times

WIDTH: Final = 640.0
HEIGHT: Final = 260.0
LEFT, RIGHT, TOP, BOTTOM = 84.0, 30.0, 30.0, 38.0


@dataclass(frozen=True)
class Series:
    """One line: `look` is a class of the style sheet (usual, event, asked, limit, later, lost, plain)."""

    name: str
    look: str
    values: Floats
    """(point,) or, on a Chart of intervals, (interval,); NaN = a gap"""


@dataclass(frozen=True)
class Chart:
    """Series over intervals of time; values are means over an interval and drawn as steps."""

    title: str
    said: str
    """What it shows, in a sentence: also what a screen reader says"""
    unit: str
    edges: Times
    """(interval + 1,) UTC"""
    zone: str
    series: Sequence[Series]
    shaded: tuple[np.datetime64, np.datetime64] | None = None
    """The event, say; named by shaded_name"""
    shaded_name: str = ""
    filled: tuple[int, int, str] | None = None
    """Area between two series (their places) in a look, where the first is above the second"""
    only: Floats | None = None
    """(interval,) 1 where `filled` holds; None = everywhere"""


@dataclass(frozen=True)
class Curve:
    """Series over numbers, drawn as straight lines through `points`, or as steps that end at each point."""

    title: str
    said: str
    x_name: str
    y_name: str
    points: Sequence[tuple[str, str, Floats, Floats]]
    """(name, look, x, y)"""
    stepped: bool = False
    marked: Sequence[tuple[str, str, float, float]] = ()
    """Single points: (name, look, x, y)"""


def chart_svg(chart: Chart) -> Markup:
    """The chart as SVG; its axis of values holds zero."""
    values = np.concatenate([series.values for series in chart.series])
    known = values[np.isfinite(values)]
    low, high = (min(0.0, float(known.min())), max(0.0, float(known.max()))) if known.size else (0.0, 1.0)
    y, y_ticks = value_scale(low, high, HEIGHT - BOTTOM, TOP)
    x = Scale(float(micros(chart.edges[0])), float(micros(chart.edges[-1])), LEFT, WIDTH - RIGHT)
    parts = [_shade(chart, x), *_y_axis(y, y_ticks, chart.unit), *_hours(chart, x)]
    if chart.filled is not None:
        parts.append(_between(chart, x, y))
    places = x(micros(chart.edges))
    parts += [
        f'<path class="s {series.look}" d="{step_path(places, y(series.values))}"/>'
        for series in chart.series
    ]
    return _svg(chart.title, chart.said, parts)


def curve_svg(curve: Curve) -> Markup:
    """The curve as SVG."""
    xs = np.concatenate([np.zeros(1), *[x for _, _, x, _ in curve.points]])
    ys = np.concatenate([np.zeros(1), *[y for _, _, _, y in curve.points]])
    x, x_ticks = value_scale(
        min(0.0, xs.min()), max([xs.max(), *[x for _, _, x, _ in curve.marked]]), LEFT, WIDTH - RIGHT
    )
    y, y_ticks = value_scale(
        min(0.0, ys.min()), max([ys.max(), *[y for _, _, _, y in curve.marked]]), HEIGHT - BOTTOM, TOP
    )
    parts = _y_axis(y, y_ticks, curve.y_name)
    parts += _x_axis(x, x_ticks, curve.x_name)
    for _, look, at, value in curve.points:
        if not len(at):
            continue
        if curve.stepped:
            path = step_path(x(np.concatenate([[0.0], at])), y(value))
        else:
            path = line_path(x(at), y(value))
            parts += [
                f'<circle class="dot" cx="{a:.1f}" cy="{b:.1f}" r="3"/>' for a, b in zip(x(at), y(value))
            ]
        parts.append(f'<path class="s {look}" d="{path}"/>')
    for place, (_, look, at_x, at_y) in enumerate(curve.marked):
        parts.append(_mark(float(x(at_x)), float(y(at_y)), look, place))
    return _svg(curve.title, curve.said, parts)


def numbers(chart: Chart) -> tuple[list[str], list[list[str]]]:
    """Heads and rows of the chart's table: local time and every series."""
    local = pd.DatetimeIndex(chart.edges[:-1]).tz_localize("UTC").tz_convert(chart.zone)
    columns = [[_number(value) for value in series.values] for series in chart.series]
    heads = ["time", *[f"{series.name}, {chart.unit}" for series in chart.series]]
    times = [f"{at:%a %H:%M}" for at in local]
    return heads, [list(row) for row in zip(times, *columns)]


def bar_cell(share: float, look: str, limit: float | None = None) -> Markup:
    """A bar of 0 to 1 in a table cell, with a line at `limit`; the number stands in the row."""
    width = 100.0 * min(max(share, 0.0), 1.0)
    parts = [f'<rect class="f {look}" x="0" y="6" width="{width:.2f}" height="12"/>']
    if limit is not None:
        at = 100.0 * min(max(limit, 0.0), 1.0)
        parts.append(f'<path class="s limit" d="M{at:.2f} 0V24"/>')
    return _cell(parts)


def span_cell(start: float, end: float, inside: tuple[float, float], tail: float | None = None) -> Markup:
    """A window start..end (shares of the width) over the event `inside`; `tail`: until when it comes back."""
    parts = [_shaded_cell(inside)]
    if tail is not None and tail > end:
        parts.append(
            f'<rect class="f later soft" x="{100 * end:.2f}" y="9" width="{100 * (tail - end):.2f}" height="6"/>'
        )
    parts.append(
        f'<rect class="f event" x="{100 * start:.2f}" y="4" width="{max(100 * (end - start), 0.8):.2f}" height="16"/>'
    )
    return _cell(parts)


def course_cell(
    courses: Sequence[tuple[str, Floats]],
    high: float,
    inside: tuple[float, float] | None = None,
    limit: float | None = None,
) -> Markup:
    """Steps of 0..high over the row's whole width, one per (look, values)."""
    parts = []
    if inside is not None:
        parts.append(_shaded_cell(inside))
    y = Scale(0.0, high if high > 0.0 else 1.0, 23.0, 1.0)
    if limit is not None:
        parts.append(f'<path class="s limit" d="M0 {y(limit):.2f}H100"/>')
    for look, values in courses:
        places = np.linspace(0.0, 100.0, len(values) + 1)
        parts.append(f'<path class="s {look}" d="{step_path(places, y(values))}"/>')
    return _cell(parts, "cell tall")


def swatch(look: str, filled: bool = False) -> Markup:
    """A short piece of a line (or area) for the key."""
    inner = (
        f'<rect class="f {look}" width="32" height="12"/>'
        if filled
        else f'<path class="s {look}" d="M0 6H32"/>'
    )
    return Markup('<svg viewBox="0 0 32 12" aria-hidden="true" focusable="false">{}</svg>').format(
        Markup(inner)
    )


def mark_swatch(look: str, place: int) -> Markup:
    """The mark of a single point, for the key."""
    return Markup('<svg viewBox="0 0 32 12" aria-hidden="true" focusable="false">{}</svg>').format(
        Markup(_mark(16.0, 6.0, look, place))
    )


def _mark(x: float, y: float, look: str, place: int) -> str:
    """A disc for the first single point of a curve, a diamond for the others: shape tells them apart too."""
    if place == 0:
        return f'<circle class="f {look}" cx="{x:.1f}" cy="{y:.1f}" r="6"/>'
    return f'<path class="f {look}" d="M{x:.1f} {y - 7:.1f}l7 7l-7 7l-7 -7Z"/>'


def step_path(edges: Floats, heights: Floats) -> str:
    """SVG path of steps: heights (n,) between edges (n + 1,); a NaN lifts the pen."""
    pieces, down = [], False
    for left, right, height in zip(edges[:-1], edges[1:], heights):
        if not np.isfinite(height):
            down = False
            continue
        pieces.append(f"{'V' if down else f'M{left:.1f} '}{height:.1f}H{right:.1f}")
        down = True
    return "".join(pieces)


def line_path(xs: Floats, ys: Floats) -> str:
    """SVG path through points."""
    return "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in zip(xs, ys))


def _svg(title: str, said: str, parts: Sequence[str]) -> Markup:
    label = escape(f"{title}. {said}")
    return Markup(
        f'<svg class="chart" viewBox="0 0 {WIDTH:.0f} {HEIGHT:.0f}" role="img" aria-label="{label}">'
        + "".join(parts)
        + "</svg>"
    )


def _cell(parts: Sequence[str], look: str = "cell") -> Markup:
    return Markup(
        f'<svg class="{look}" viewBox="0 0 100 24" preserveAspectRatio="none" aria-hidden="true" focusable="false">'
        + "".join(parts)
        + "</svg>"
    )


def _shaded_cell(inside: tuple[float, float]) -> str:
    width = 100.0 * (inside[1] - inside[0])
    return f'<rect class="shade" x="{100 * inside[0]:.2f}" y="0" width="{width:.2f}" height="24"/>'


def _y_axis(y: Scale, ticks: Sequence[float], name: str) -> list[str]:
    """Lines and numbers of the axis of values, its name above the topmost."""
    digits = 0 if abs(ticks[1] - ticks[0]) >= 1.0 else 2
    parts = []
    for tick in ticks:
        at = float(y(tick))
        look = "axis" if tick == 0.0 else "grid"
        parts.append(f'<path class="{look}" d="M{LEFT} {at:.1f}H{WIDTH - RIGHT}"/>')
        parts.append(f'<text x="{LEFT - 6}" y="{at + 4:.1f}" text-anchor="end">{tick:,.{digits}f}</text>')
    parts.append(f'<text x="{LEFT - 6}" y="{TOP - 10}">{escape(name)}</text>')
    return parts


def _x_axis(x: Scale, ticks: Sequence[float], name: str) -> list[str]:
    digits = 0 if abs(ticks[1] - ticks[0]) >= 1.0 else 1
    base = HEIGHT - BOTTOM
    parts = [f'<path class="axis" d="M{LEFT} {base}H{WIDTH - RIGHT}"/>']
    for place, tick in enumerate(ticks):
        look = ' class="minor"' if place % 2 else ""
        parts.append(
            f'<text x="{float(x(tick)):.1f}" y="{base + 23}" text-anchor="middle"{look}>{tick:,.{digits}f}</text>'
        )
    parts.append(f'<text x="{WIDTH - RIGHT}" y="{base - 6}" text-anchor="end">{escape(name)}</text>')
    return parts


def _hours(chart: Chart, x: Scale) -> list[str]:
    base = HEIGHT - BOTTOM
    parts = []
    for place, (tick, midnight) in enumerate(hour_ticks(chart.edges[0], chart.edges[-1], chart.zone)):
        at = float(x(micros(tick.tz_convert("UTC").tz_localize(None).to_datetime64())))
        if midnight:
            parts.append(f'<path class="grid" d="M{at:.1f} {TOP}V{base}"/>')
        words = f"{tick:%a}" if midnight else f"{tick:%H:%M}"
        look = ' class="minor"' if place % 2 else ""
        parts.append(f'<text x="{at:.1f}" y="{base + 23}" text-anchor="middle"{look}>{words}</text>')
    return parts


def _shade(chart: Chart, x: Scale) -> str:
    if chart.shaded is None:
        return ""
    start, end = (float(x(micros(time))) for time in chart.shaded)
    return f'<rect class="shade" x="{start:.1f}" y="{TOP}" width="{end - start:.1f}" height="{HEIGHT - BOTTOM - TOP}"/>'


def _between(chart: Chart, x: Scale, y: Scale) -> str:
    """Rectangles between two series, interval by interval."""
    assert chart.filled is not None
    above, below, look = chart.filled
    top, bottom = chart.series[above].values, chart.series[below].values
    on = np.isfinite(top) & np.isfinite(bottom) & (top > bottom)
    if chart.only is not None:
        on &= chart.only > 0.0
    places, high, low = x(micros(chart.edges)), y(top), y(bottom)
    path = "".join(
        f"M{places[k]:.1f} {high[k]:.1f}H{places[k + 1]:.1f}V{low[k]:.1f}H{places[k]:.1f}Z"
        for k in np.flatnonzero(on)
    )
    return f'<path class="f {look} soft" d="{path}"/>'


def _number(value: float) -> str:
    return "–" if not np.isfinite(value) else f"{value:,.1f}"
