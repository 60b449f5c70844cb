"""A two-site workbook as a manager might bring it: headings, units and spellings of its own; everything invented."""

from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import openpyxl

FIRST = datetime(2026, 7, 14)
HOURS = 96
Rows = list[list[Any]]


def two_sites() -> dict[str, Rows]:
    """Rows of each sheet by its title; the first row that has two cells is the heading."""
    hour = np.arange(HOURS) % 24
    temperature_f = 84.0 + 13.0 * np.sin((hour - 9.0) / 24.0 * 2.0 * np.pi)
    return {
        "Fleet": [
            ["Programme name", "Two Towers Trial"],
            ["Time zone", "America/Chicago"],
            ["Currency", "USD"],
            ["Energy price (USD/MWh)", 142],
            ["Notice (h)", 2],
        ],
        "Buildings": [
            ["Our buildings, as of spring"],
            [
                "Building",
                "Building use",
                "Floor Area (sq ft)",
                "Peak cooling (tons)",
                "Demand charge",
                "Architect",
            ],
            ["Maple Court ", "Court", 180000, None, 14.5, "unknown"],
            [],
            ["River Annex", "Office building", None, "310 ", 14.5, ""],
        ],
        "Chillers": [
            ["Building", "Tag", "Chiller type", "Capacity (tons)", "Efficiency (kW/ton)"],
            ["Maple Court", "CH-1", "Air-cooled", 260, None],
            ["Maple Court", "CH-2", "Air-cooled", 260, None],
            ["River Annex", "CH-1", "Centrifugal", 200, 0.58],
            ["River Annex", "CH-2", "Centrifugal", 200, 0.58],
        ],
        "Ice tanks": [
            ["Building", "Tank type", "Size (ton-hours)"],
            ["Maple Court", "Internal melt", 1400],
            ["River Annex", "Chilled water", "1,250.5"],
        ],
        "Weather": [
            ["Time", "Outdoor temperature (F)", "Humidity"],
            *[
                [FIRST + timedelta(hours=at), round(float(temperature_f[at]), 1), 48 if at % 2 else "48,5"]
                for at in range(HOURS)
            ],
        ],
    }


def write_workbook(path: Path, sheets: dict[str, Rows] | None = None) -> Path:
    """Write the sheets as an Excel workbook."""
    book = openpyxl.Workbook()
    book.remove(book.active)
    for title, rows in (sheets or two_sites()).items():
        sheet = book.create_sheet(title)
        for row in rows:
            sheet.append(row)
    book.save(path)
    return path
