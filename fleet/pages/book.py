"""The folder of pages: which pages there are, how they lead to each other, and how they are written.

Owns `pages/` in a fleet folder: an index and a season at its top, a folder for each event. Pages are made of the
record and can be made again at any time; an event's folder appears whole, in place of the one before.
"""

import os
import secrets
import shutil
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from fleet import records
from fleet.called import called_sites
from fleet.errors import FleetError
from fleet.orders import NOT_IN_FILE_NAMES, file_stem, orders
from fleet.pages import diary, energy, event, front, order_sheet, settled, statement
from fleet.pages.case import Case
from fleet.pages.sheet import Link

PAGES: Final = "pages"
MAKING: Final = ".making-"
STATEMENT: Final = "statement.html"
OFFER: Final = "offer.html"
TO_INDEX: Final = Link("Index", "../index.html")
FROM_OFFER: Final = (Link("Index", "index.html"),)
PAGES_OF_EVENT: Final = (
    ("Event", "event.html"),
    ("Orders", "orders.html"),
    ("Energy", "energy.html"),
    ("Statement", "statement.html"),
)


@dataclass(frozen=True)
class Written:
    """Pages that were written, relative to `path`."""

    path: Path
    files: tuple[str, ...]

    @property
    def index(self) -> Path:
        """The page that leads to all others."""
        return self.path / "index.html"


def write(home: Path, event_id: str | None = None, offer: str | None = None) -> Written:
    """Write the pages of one event, or of every event, and the index and season of the folder `home`.

    offer: the page before a call, where one was made. Raises FleetError where a record cannot be read, or the
    disk refuses.
    """
    return _write(home, records.event_ids(home) if event_id is None else [event_id], offer)


def write_offer(home: Path, offer: str) -> Written:
    """Write the page before a call and the index that leads to it; pages of events stay as they are."""
    return _write(home, [], offer)


def _write(home: Path, wanted: Collection[str], offer: str | None) -> Written:
    written: list[str] = []
    with records.lock(home):
        folder = home / PAGES
        try:
            folder.mkdir(exist_ok=True)
            _sweep(folder)
            for one in wanted:
                files = event_files(home, one)
                _replace_folder(folder / one, files)
                written += [f"{one}/{name}" for name in files]
            top = {} if offer is None else {OFFER: offer}
            for name, text in top.items():
                _replace_file(folder / name, text)
            made = front.front_files(home, folder)
            for name, text in made.items():
                _replace_file(folder / name, text)
        except OSError as error:
            raise FleetError(
                f"{folder}: cannot be written ({error.strerror or error}); free some space or mend the permissions"
            ) from error
    return Written(folder, (*sorted(top | made), *written))


def event_files(home: Path, event_id: str) -> dict[str, str]:
    """Every page and file of an event's newest call and settlement, by name below its folder."""
    case = Case(records.read_call(home, event_id))
    done = settled.read(home, event_id, case)
    there = [name for _, name in PAGES_OF_EVENT if done is not None or name != STATEMENT]
    pages = {
        "event.html": event.event_page(case, links("event.html", there)),
        "energy.html": energy.energy_page(case, links("energy.html", there)),
    }
    statements = {} if done is None else _statement_files(done, there)
    return pages | _order_files(home, case, there) | statements


def _statement_files(done: settled.Settled, there: Collection[str]) -> dict[str, str]:
    """The fleet's statement and each site's."""
    stems = {
        str(site): f"{place:03d}-{NOT_IN_FILE_NAMES.sub('_', str(site))[:60]}"
        for place, site in enumerate(done.sites["site_id"], start=1)
    }
    up = [Link("Statement", "../statement.html"), Link("Event", "../event.html")]
    files = {STATEMENT: statement.statement_page(done, links(STATEMENT, there), stems)}
    return files | {
        f"statements/{stem}.html": statement.site_page(done, site, up) for site, stem in stems.items()
    }


def _order_files(home: Path, case: Case, there: Collection[str]) -> dict[str, str]:
    """The list of orders, each sheet, each calendar file."""
    sites = {site.window.site_id: site for site in called_sites(case.record)}
    made = [(order, file_stem(order)) for order in orders(case.record)]
    gone = diary.withdrawn_sites(home, case.record.event_id, case.record.revision)
    called_at = case.request["called_at"].iloc[0].to_pydatetime()
    files = {"orders.html": order_sheet.orders_page(case, made, gone, links("orders.html", there))}
    up = [Link("Orders", "../orders.html"), Link("Event", "../event.html")]
    for (order, stem), site in zip(made, sites.values(), strict=True):
        files[f"orders/{stem}.html"] = order_sheet.sheet_page(
            order, [*up, Link("Calendar", f"{stem}.ics")], site
        )
        files[f"orders/{stem}.ics"] = diary.order_calendar(order, called_at)
    for one in gone:
        files[f"orders/{one.stem}.ics"] = diary.cancelled_calendar(
            case.record.event_id, one, case.record.revision, called_at
        )
    return files


def links(here: str, there: Collection[str]) -> list[Link]:
    """The way from one page of an event to the others that are `there`."""
    return [TO_INDEX, *[Link(name, href, href == here) for name, href in PAGES_OF_EVENT if href in there]]


def _sweep(folder: Path) -> None:
    """Remove what killed runs left; pages are made again, so nobody needs to be told."""
    for left in folder.glob(f"{MAKING}*"):
        shutil.rmtree(left) if left.is_dir() else left.unlink()


def _replace_folder(final: Path, files: Mapping[str, str]) -> None:
    """Write files (names may hold one folder) beside `final`, then let them take its place."""
    making = final.parent / f"{MAKING}{final.name}-{secrets.token_hex(4)}"
    for name, text in files.items():
        path = making / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(text.encode("utf-8"))
    if final.exists():
        before = making.with_name(f"{making.name}-before")
        os.rename(final, before)
        os.rename(making, final)
        shutil.rmtree(before)
    else:
        os.rename(making, final)


def _replace_file(final: Path, text: str) -> None:
    making = final.parent / f"{MAKING}{final.name}-{secrets.token_hex(4)}"
    making.write_bytes(text.encode("utf-8"))
    os.replace(making, final)
