"""The terminal: progress on stderr where a person watches, text or one JSON document on stdout.

Owns how things are shown, never what. Control characters in any text are made harmless here.
"""

import json
import sys
from collections.abc import Iterable

import numpy as np


class Terminal:
    """Where a command's words go; with `as_json` stdout gets one JSON document and nothing else."""

    def __init__(self, as_json: bool) -> None:
        self.as_json = as_json
        self._shown = False

    def progress(self, text: str) -> None:
        """One line of progress, on a terminal only."""
        if sys.stderr.isatty():
            sys.stderr.write(f"\r\x1b[2K{harmless(text)} ...")
            sys.stderr.flush()
            self._shown = True

    def put(self, lines: Iterable[str], document: object) -> None:
        """The command's result: lines for a person, or the document."""
        self._clear()
        if self.as_json:
            sys.stdout.write(json.dumps(document, indent=1, default=_plain, allow_nan=False) + "\n")
        else:
            sys.stdout.write("".join(f"{harmless(line)}\n" for line in lines))

    def fail(self, message: str, document: object) -> None:
        """A refusal: the message on stderr, with `as_json` the document on stdout too."""
        self._clear()
        if self.as_json:
            self.put((), document)
        sys.stderr.write("".join(f"{harmless(line)}\n" for line in message.split("\n")))

    def _clear(self) -> None:
        if self._shown:
            sys.stderr.write("\r\x1b[2K")
            self._shown = False


def harmless(text: str) -> str:
    """Text with control characters (escape codes too) shown as their numbers."""
    return "".join(char if char.isprintable() else f"\\x{ord(char):02x}" for char in text)


def _plain(value: object) -> object:
    """numpy and other values as JSON knows them."""
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, np.ndarray):
        return value.tolist()
    return str(value)
