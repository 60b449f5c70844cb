"""Orders of an event written beside its call: one text a site and one JSON file of all."""

from dataclasses import dataclass
from pathlib import Path

from fleet import records
from fleet.orders import order_files


@dataclass(frozen=True)
class Written:
    """Orders that were written."""

    path: Path
    files: tuple[str, ...]
    notes: tuple[str, ...] = ()
    """What killed runs left and was swept."""


def write(home: Path, event_id: str) -> Written:
    """Write the orders of the newest call of an event; where they stand already, those are returned."""
    record = records.read_call(home, event_id)
    files = order_files(record)
    with records.lock(home) as swept:
        path = records.write_orders(home, event_id, files)
    return Written(path, tuple(sorted(files)), tuple(swept))
