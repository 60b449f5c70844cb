"""The terminal: progress on stderr where a person watches, text or one JSON document on stdout.

Owns how things are shown, never what. Control characters in any text are made harmless on the way out.
"""

import json
import os
import sys
from collections.abc import Iterable
from contextlib import suppress

from fleet.errors import FleetError
from fleet.harmless import harmless


class Terminal:
    """Where a command's words go; with `as_json` stdout gets one JSON document and nothing else."""

    def __init__(self, as_json: bool) -> None:
        self.as_json = as_json
        self._shown = False
        for stream in (sys.stdout, sys.stderr):
            if hasattr(stream, "reconfigure"):
                stream.reconfigure(errors="backslashreplace")

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
            _write(json.dumps(document, indent=1, default=_plain, allow_nan=False) + "\n")
        else:
            _write("".join(f"{harmless(line)}\n" for line in lines))

    def fail(self, message: str, document: object) -> None:
        """A refusal: the message on stderr, with `as_json` the document on stdout too."""
        self._clear()
        if self.as_json:
            with suppress(FleetError):
                self.put((), document)
        sys.stderr.write("".join(f"{harmless(line)}\n" for line in message.split("\n")))

    def _clear(self) -> None:
        if self._shown:
            sys.stderr.write("\r\x1b[2K")
            self._shown = False


def _write(text: str) -> None:
    """To stdout at once; a reader that has gone away is no error, a full disk is."""
    try:
        sys.stdout.write(text)
        sys.stdout.flush()
    except BrokenPipeError:
        _to_nowhere()
    except OSError as error:
        _to_nowhere()
        raise FleetError(
            f"standard output cannot be written ({error.strerror}); what the command did is done; "
            "free some space or send the output elsewhere"
        ) from error


def _to_nowhere() -> None:
    """Let what is still buffered for stdout go nowhere, so that the end of the program does not trip over it."""
    with suppress(OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _plain(value: object) -> object:
    """numpy and other values as JSON knows them."""
    for convert in ("item", "tolist"):
        if hasattr(value, convert) and (convert == "tolist" or getattr(value, "shape", None) == ()):
            return getattr(value, convert)()
    return str(value)
