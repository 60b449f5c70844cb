"""A CSV file read with care: its text checked, its rows numbered by their lines, ragged ones refused.

Owns what a CSV must be to be a table at all. Leaves the fast reader and Parquet to tables.py, cells to values.py.
"""

import csv
import io
from pathlib import Path

import pandas as pd

from fleet.errors import Problem, Refused


def csv_text(path: Path) -> str:
    """The file's text, UTF-8 with or without its mark; Refused where it is none."""
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except OSError as error:
        came = f"a file that cannot be read ({error.strerror})"
        raise unreadable(
            path.name, None, came, "a table", "check that it is there and may be read"
        ) from error
    except UnicodeDecodeError as error:
        came = f"bytes that are not UTF-8 ({error.reason})"
        raise unreadable(path.name, None, came, "text in UTF-8", "save it as CSV UTF-8") from error
    if "\0" in text:
        row = text.count("\n", 0, text.index("\0")) + 1
        came = "a zero byte, as UTF-16 text has them"
        raise unreadable(path.name, row, came, "text in UTF-8", "save it as CSV UTF-8")
    return text


def csv_frame(text: str, name: str) -> pd.DataFrame:
    """The rows as text, index their line in the file (heading = 1); `name` is what messages call the file."""
    heading, lines, rows = _csv_rows(text, name)
    width = len(heading)
    wrong = [(line, len(row)) for line, row in zip(lines, rows) if len(row) != width]
    if wrong:
        line, cells = wrong[0]
        came, expected = f"{cells} cells", f"{width} as in the heading (rows like this: {len(wrong)})"
        advice = "put quotes around a text that holds a comma, and write numbers with a decimal point"
        raise unreadable(name, line, came, expected, advice)
    columns = list(zip(*rows)) if rows else [()] * width
    cells_of = (pd.Series([cell.strip() for cell in column], dtype=object) for column in columns)
    frame = pd.DataFrame(dict(enumerate(cells_of)))
    frame.columns = pd.Index(heading)
    frame.index = pd.Index(lines, dtype="int64")
    return frame


def _csv_rows(text: str, name: str) -> tuple[list[str], list[int], list[list[str]]]:
    """Heading, the file line each row starts on, and the rows that are not blank."""
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    lines, rows, line = [], [], 1
    heading: list[str] | None = None
    try:
        for row in reader:
            if any(cell.strip() for cell in row):
                if heading is None:
                    heading = [cell.strip() for cell in row]
                else:
                    lines.append(line)
                    rows.append(row)
            line = reader.line_num + 1
    except csv.Error as error:
        advice = "mend the quotes of that row, or save the file again as CSV"
        raise unreadable(name, line, str(error), "a row of CSV", advice) from error
    if heading is None:
        advice = "give it its heading and rows, or remove it"
        raise unreadable(name, None, "an empty file", "a heading at least", advice)
    if len(heading) == 1 and ";" in heading[0]:
        came, advice = "cells parted by semicolons", "save it with commas and decimal points"
        raise unreadable(name, 1, came, "cells parted by commas", advice)
    return heading, lines, rows


def unreadable(file: str, row: int | None, came: str, expected: str, advice: str) -> Refused:
    """What to raise where an input file is no table at all."""
    return Refused([Problem(file, row, None, came, expected, advice)])
