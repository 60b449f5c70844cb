"""Text made harmless: nothing in it steers a terminal, nothing in a cell of CSV is a formula to a spreadsheet.

Owns how such text is written and read back. Who writes text to where is the business of those who write.
"""

import re
from typing import Final

_FORMULA: Final = re.compile(r"'*[=+\-@]")
"""What a spreadsheet would work out, apostrophes before it counted in."""


def harmless(text: str) -> str:
    """Text with control characters (escape codes too) shown as their numbers."""
    if text.isprintable():
        return text
    return "".join(char if char.isprintable() else f"\\x{ord(char):02x}" for char in text)


def csv_text(text: str) -> str:
    """A text as a cell of CSV: harmless, and with an apostrophe before what a spreadsheet would work out."""
    plain = harmless(text)
    return f"'{plain}" if _FORMULA.match(plain) else plain


def text_of_csv(cell: str) -> str:
    """The text of a cell that `csv_text` wrote (or a user who knows the apostrophe); any other as it is."""
    return cell[1:] if cell.startswith("'") and _FORMULA.match(cell[1:]) else cell
