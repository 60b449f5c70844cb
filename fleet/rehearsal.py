"""A rehearsal: a whole practice event on a fleet, with meters played by a finer model.

Owns the order of the steps and where things lie. The player (demo_fleet) and the fleet meet through files only.
"""

import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from demo_fleet.calendar import EVENING, EVENT_DAY, MIDDAY, Scene
from demo_fleet.events import Played, play
from demo_fleet.files import DemoError
from demo_fleet.sample import SampleFacts
from demo_fleet.sample import sample as write_sample
from fleet import calling, desk, ordering, quoting, settling
from fleet.audit import Audit, audit
from fleet.desk import Ask, Progress
from fleet.errors import FleetError
from fleet.folder import open_folder
from fleet.pages import book
from fleet.pages.offer import offer_page
from fleet.wall_time import local_day, local_day_start
from sites.clock import as_us
from sites.direction import Direction

EVENT_ID = "practice"
SHARE_ASKED = 0.8
"""Share of what the fleet can sustain that a rehearsal asks for."""
ROUND_KW = 10.0
DEMO_NODE = "North"


@dataclass(frozen=True)
class Rehearsed:
    """A rehearsal that was played, with where everything lies."""

    home: Path
    fleet: Path
    survey: desk.Survey
    offer: quoting.Offer
    call: calling.Call
    orders: ordering.Written
    played: Played
    settled: settling.Settled
    audit: Audit
    pages: book.Written
    seconds: float


def new_sample(
    directory: Path, sites: int, seed: int, progress: Progress, scene: Scene = EVENING
) -> SampleFacts:
    """Write an invented fleet folder; FleetError where the folder exists already."""
    if directory.exists():
        raise FleetError(f"{directory}: exists already; name a folder that does not, or remove it first")
    return write_sample(
        directory, sites, seed, lambda text, share: progress(f"{text} ({share:.0%})"), scene=scene
    )


def rehearse_new(directory: Path, seed: int, progress: Progress, midday: bool = False) -> Rehearsed:
    """Write an invented fleet of 40 sites to `directory` and play a practice event on it: a shed, or at `midday` an
    absorb."""
    started = time.perf_counter()
    scene = MIDDAY if midday else EVENING
    new_sample(directory, 40, seed, progress, scene)
    zone = open_folder(directory, names=(), needed=()).settings.timezone
    ask = Ask(
        None if midday else DEMO_NODE,
        _direction(midday),
        _at_hour(np.datetime64(EVENT_DAY), scene.call_hour, zone),
        _at_hour(np.datetime64(EVENT_DAY), scene.from_hour, zone),
        _at_hour(np.datetime64(EVENT_DAY), scene.to_hour, zone),
    )
    return _play(directory, directory, ask, None, progress, started)


def rehearse_own(fleet: Path, seed: int, progress: Progress, midday: bool = False) -> Rehearsed:
    """Play a practice event on a fleet folder; writes only to `fleet`/rehearsals/<n>/.

    The event is a shed 16:00 to 19:00 local, or at `midday` an absorb 12:00 to 15:00, on the last day whose next day
    the weather table still covers, called as long before as the fleet's notice asks, three hours at least.
    """
    scene = MIDDAY if midday else EVENING
    started = time.perf_counter()
    folder = open_folder(fleet, without=("meters",))
    zone = folder.settings.timezone
    weather = folder.frames["weather"]["interval_start"]
    if weather.empty:
        raise FleetError(f"{fleet}: there is no weather table; a rehearsal needs weather over its two days")
    last = weather.max() + pd.Timedelta(minutes=folder.settings.interval_minutes)
    day = local_day(np.datetime64(last.tz_localize(None), "us"), zone) - np.timedelta64(2, "D")
    start = _at_hour(day, scene.from_hour, zone)
    wait = max(folder.settings.notice_minutes, 60.0 * (scene.from_hour - scene.call_hour))
    at = start - np.timedelta64(int(wait), "m")
    ask = Ask(None, _direction(midday), at, start, _at_hour(day, scene.to_hour, zone))
    return _play(fleet, _next_home(fleet), ask, seed, progress, started)


def _direction(midday: bool) -> Direction:
    return Direction.ABSORB if midday else Direction.SHED


def _at_hour(day: np.datetime64, hour: int, zone: str) -> np.datetime64:
    return as_us(local_day_start(day, zone) + np.timedelta64(hour, "h"))


def _next_home(fleet: Path) -> Path:
    """A new folder `rehearsals/<n>/`, n one above the highest there is."""
    folder = fleet / "rehearsals"
    there = [int(path.name) for path in folder.glob("*") if path.name.isdigit()] if folder.exists() else []
    home = folder / str(max(there, default=0) + 1)
    try:
        home.mkdir(parents=True)
    except OSError as error:
        raise FleetError(f"{home}: cannot be made ({error.strerror}); mend the permissions") from error
    return home


def _play(
    fleet: Path, home: Path, ask: Ask, seed: int | None, progress: Progress, started: float
) -> Rehearsed:
    survey = desk.survey(fleet, ask, progress)
    offer = quoting.offer(survey)
    asked = np.floor(SHARE_ASKED * offer.available.sustained_kw / ROUND_KW) * ROUND_KW
    if asked <= 0.0:
        raise FleetError(
            f"{fleet}: no site can be called for the practice event; "
            "`shedwright quote` on the same hours says what limits each site"
        )
    made = calling.call(survey, float(asked), EVENT_ID, "rehearsal", home, progress=progress)
    written = ordering.write(home, EVENT_ID)
    try:
        played = play(fleet, made.path, home, seed, lambda text, share: progress(f"{text} ({share:.0%})"))
    except DemoError as error:
        raise FleetError(str(error)) from error
    settled = settling.settle_event(home, EVENT_ID, played.readings, progress, meters_of=fleet)
    progress("auditing")
    found = audit(home, EVENT_ID)
    progress("writing pages")
    pages = book.write(home, offer=offer_page(survey, offer, float(asked), book.FROM_OFFER))
    seconds = time.perf_counter() - started
    return Rehearsed(home, fleet, survey, offer, made, written, played, settled, found, pages, seconds)
