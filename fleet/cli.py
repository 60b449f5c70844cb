"""The command line: parses, calls one function, prints, chooses the exit code.

Exit codes: 0 done; 2 wrong usage or refused input; 3 the request cannot be met as asked; 4 an audit found a
fault; 1 is a defect. Rooms are imported inside the commands, so that help needs none of them.
"""

import sys
from datetime import UTC, datetime
from pathlib import Path
from typing import Annotated, Any, cast

import typer

from fleet import options
from fleet.errors import CannotBeMet, FleetError, parts
from fleet.harmless import harmless
from fleet.terminal import Terminal
from sites.errors import SitesError

NAME = "shedwright"
REFUSED, NOT_MET, FAULT = 2, 3, 4
WRONG_USAGE = cast(type[Exception], typer.BadParameter.__base__)
"""What typer raises where options or arguments do not fit."""

app = typer.Typer(
    no_args_is_help=True,
    add_completion=True,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    help="Call, order and settle demand-response events on buildings with cool thermal storage.",
)


@app.command()
def rehearse(
    directory: Annotated[
        Path | None, typer.Argument(metavar="DIR", help="A fleet folder; none: an invented fleet.")
    ] = None,
    seed: Annotated[int, typer.Option(help="Seed of the invented fleet and of the simulated meters.")] = 1,
    midday: Annotated[
        bool, typer.Option("--midday", help="An absorb at midday of a day with too much sun, not a shed.")
    ] = False,
    json: options.Json = False,
) -> None:
    """Play a whole practice event: quote, call, orders, simulated meters, settlement, audit.

    Example: shedwright rehearse
    """
    from fleet import rehearsal, show

    terminal = Terminal(json)
    played = (
        rehearsal.rehearse_new(Path("rehearsal"), seed, terminal.progress, midday)
        if directory is None
        else rehearsal.rehearse_own(directory, seed, terminal.progress, midday)
    )
    terminal.put(show.rehearsal_lines(played), show.rehearsal_json(played))
    if not played.audit.holds:
        raise typer.Exit(FAULT)


@app.command()
def sample(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Folder to be made; it must not exist.")],
    sites: Annotated[int, typer.Option("--sites", min=1, max=100_000, help="Number of sites.")] = 40,
    seed: Annotated[int, typer.Option("--seed", help="Seed; the same seed gives the same fleet.")] = 1,
    json: options.Json = False,
) -> None:
    """Write an invented fleet folder.

    Example: shedwright sample invented --sites 40 --seed 1
    """
    from fleet import rehearsal, show

    terminal = Terminal(json)
    facts = rehearsal.new_sample(directory, sites, seed, terminal.progress)
    terminal.put(show.sample_lines(facts), show.sample_json(facts))


@app.command()
def begin(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Folder to be made; it must not exist.")],
    book: options.Book = None,
    mapping: options.Mapping = None,
    name: Annotated[str | None, typer.Option("--name", help="The fleet's name.")] = None,
    timezone: Annotated[str | None, typer.Option("--timezone", help="IANA name: Europe/Athens.")] = None,
    currency: Annotated[str | None, typer.Option("--currency", help="ISO 4217: EUR.")] = None,
    price: Annotated[float | None, typer.Option("--price", help="One energy price, per kWh.")] = None,
    json: options.Json = False,
) -> None:
    """Start a fleet folder of your own: with example rows, or from a workbook.

    Example: shedwright begin mine --from fleet.xlsx, then with --mapping fleet.mapping.csv
    """
    from fleet import begin as beginning

    terminal = Terminal(json)
    told = {"name": name, "timezone": timezone, "currency": currency, "energy_price_per_kwh": price}
    given = {key: value for key, value in told.items() if value is not None}
    if book is None:
        if mapping is not None:
            raise FleetError("--mapping without --from: name the workbook it maps, too")
        begun = beginning.begin(directory, given)
    elif mapping is None:
        suggested = beginning.suggest_mapping(directory, book)
        terminal.put(beginning.suggested_lines(suggested), beginning.suggested_json(suggested))
        raise typer.Exit(REFUSED)
    else:
        terminal.progress("reading the workbook")
        begun = beginning.begin_from(directory, book, mapping, given)
    terminal.put(beginning.begun_lines(begun), beginning.begun_json(begun))


@app.command()
def columns(
    table: Annotated[
        str | None, typer.Argument(metavar="TABLE", help="One table; none: all of them.")
    ] = None,
    json: options.Json = False,
) -> None:
    """Print the table of columns: type, unit, range, meaning, required, default, where to find the value.

    Example: shedwright columns tanks
    """
    from fleet import show

    terminal = Terminal(json)
    terminal.put(show.columns_lines(table), show.columns_json(table))


@app.command()
def check(
    fleet: options.FleetDir,
    effects: Annotated[
        bool,
        typer.Option("--effects", help="Say what the assumed values are worth in kW; takes some seconds."),
    ] = False,
    json: options.Json = False,
) -> None:
    """Check a fleet folder: all problems at once, what can be done with it, every assumed value.

    Example: shedwright check rehearsal
    """
    from fleet import check as checking

    terminal = Terminal(json)
    terminal.progress("checking")
    found = checking.report(fleet, effects, terminal.progress)
    terminal.put(checking.lines(found), checking.document(found))
    if found.problems:
        raise typer.Exit(REFUSED)


@app.command()
def quote(
    fleet: options.FleetDir,
    start: options.From,
    end: options.To,
    node: options.Node = None,
    at: options.At = None,
    direction: options.Way = "shed",
    recovery: options.Recovery = None,
    tons: Annotated[bool, typer.Option("--tons", help="Cooling in tons and ton-hours.")] = False,
    site: Annotated[
        str | None, typer.Option("--site", help="One site's quote line by line, to check by hand.")
    ] = None,
    json: options.Json = False,
) -> None:
    """Tell what each site and the fleet can give, for how long, what limits it, what recovery costs.

    Example: shedwright quote rehearsal --from 2026-07-15T16:00 --to 2026-07-15T19:00 --at 2026-07-15T13:00
    """
    from fleet import desk, quoting, show

    terminal = Terminal(json)
    survey = desk.survey(fleet, _ask(fleet, start, end, node, at, direction, recovery), terminal.progress)
    terminal.progress("working out what the fleet can give together")
    told = quoting.offer(survey)
    lines = (
        show.quote_lines(survey, told, tons) if site is None else show.site_lines(survey, told, site, tons)
    )
    terminal.put(lines, show.quote_json(survey, told) | ({} if site is None else {"reckoning": lines}))


@app.command()
def call(
    fleet: options.FleetDir,
    kw: options.AskedKw = None,
    start: options.MaybeFrom = None,
    end: options.MaybeTo = None,
    node: options.Node = None,
    file: options.RequestFile = None,
    event: options.NewEvent = None,
    at: options.At = None,
    direction: options.Way = "shed",
    purpose: options.Purpose = "real",
    accept_less: options.AcceptLess = False,
    within: options.Within = None,
    include: options.Include = None,
    exclude: options.Exclude = None,
    fewest: options.Fewest = False,
    most_over: options.MostOver = None,
    recovery: options.Recovery = None,
    json: options.Json = False,
) -> None:
    """Allocate a request over the sites and write the event record.

    Example: shedwright call rehearsal --kw 1500 --from 2026-07-15T16:00 --to 2026-07-15T19:00
    --node North --at 2026-07-15T13:00 --event practice-2 --purpose rehearsal
    """
    from fleet import calling, desk, show
    from fleet.asking import Words, call_ask
    from fleet.wishes import Wishes

    terminal = Terminal(json)
    words = Words(event, purpose, within, tuple(recovery or ()))
    ask, asked = call_ask(fleet, kw, start, end, file, node, at or _now(), direction, words)
    survey = desk.survey(fleet, ask, terminal.progress, asked.largest_kw)
    made = calling.call(
        survey,
        asked.kw,
        event,
        purpose,
        fleet,
        accept_less,
        within,
        Wishes(tuple(include or ()), tuple(exclude or ()), fewest, most_over),
        asked.node_ids,
        asked.notes,
        progress=terminal.progress,
    )
    terminal.put(show.call_lines(survey, made), show.call_json(survey, made))


@app.command()
def orders(fleet: options.FleetDir, event: options.EventId, json: options.Json = False) -> None:
    """Write what each called site's operator gets, as text and JSON.

    Example: shedwright orders rehearsal practice-2
    """
    from fleet import ordering, show

    terminal = Terminal(json)
    written = ordering.write(fleet, event)
    terminal.put(show.orders_lines(written), show.orders_json(written))


@app.command()
def settle(
    fleet: options.FleetDir,
    event: options.EventId,
    meter: options.Readings = None,
    excuse: options.Excuse = None,
    readmit: options.Readmit = None,
    why: options.Why = "",
    who: options.Who = "",
    again: options.Again = None,
    json: options.Json = False,
) -> None:
    """Settle an event on its meters: a new settlement revision.

    Example: shedwright settle rehearsal practice
    """
    from fleet import settling, show

    terminal = Terminal(json)
    if again is not None:
        different = settling.settle_again(fleet, event, again, meter)
        text = f"settlement revision {again}: " + (
            ", ".join(different) + " differ" if different else "same bytes"
        )
        terminal.put([text], {"revision": again, "different": different})
        raise typer.Exit(FAULT if different else 0)
    excused, readmitted = dict.fromkeys(excuse or [], why), dict.fromkeys(readmit or [], why)
    settled = settling.settle_event(
        fleet, event, meter, terminal.progress, excuse=excused, readmit=readmitted, who=who
    )
    terminal.put(show.settle_lines(settled), show.settle_json(settled))


@app.command()
def reckon(
    fleet: options.FleetDir,
    event: options.EventId,
    site: Annotated[str, typer.Argument(metavar="SITE", help="The site's id.")],
    revision: Annotated[
        int | None, typer.Option("--revision", help="A settlement revision; default the newest.")
    ] = None,
    json: options.Json = False,
) -> None:
    """Show how one site was settled, line by line, from the record alone.

    Example: shedwright reckon rehearsal practice hotel-03
    """
    from fleet import reckoning, reckoning_page

    terminal = Terminal(json)
    found = reckoning.reckon(fleet, event, site, revision)
    terminal.put(reckoning_page.reckoning_lines(found), found)


@app.command()
def audit(fleet: options.FleetDir, event: options.EventId, json: options.Json = False) -> None:
    """Check an event's record again, from the record alone, against every limit and sum.

    Example: shedwright audit rehearsal practice
    """
    from fleet import show
    from fleet.audit import audit as audit_event

    terminal = Terminal(json)
    terminal.progress("auditing")
    found = audit_event(fleet, event)
    terminal.put(show.audit_lines(found), show.audit_json(found))
    if not found.holds:
        raise typer.Exit(FAULT)


@app.command()
def pages(
    fleet: options.FleetDir,
    event: Annotated[
        str | None, typer.Argument(metavar="[EVENT]", help="One event; none: every event.")
    ] = None,
    start: Annotated[
        str | None, typer.Option("--from", help="Before a call: the offer for an event that starts then.")
    ] = None,
    end: Annotated[str | None, typer.Option("--to", help="End of that event.")] = None,
    node: options.Node = None,
    at: options.At = None,
    direction: options.Way = "shed",
    kw: Annotated[float | None, typer.Option("--kw", help="The request, shown beside the offer.")] = None,
    json: options.Json = False,
) -> None:
    """Write the pages people read, in FLEET/pages: each event with its orders and statements, the season, an
    index; with --from and --to, what the fleet can give before a call.

    Example: shedwright pages rehearsal practice
    """
    from fleet import desk, quoting, show
    from fleet.pages import book
    from fleet.pages.offer import offer_page

    terminal = Terminal(json)
    if (start is None) != (end is None):
        raise FleetError("--from and --to go together: name both for an offer, or neither")
    if start is None or end is None:
        terminal.progress("writing pages")
        written = book.write(fleet, event)
    elif event is not None:
        raise FleetError("EVENT and --from: an offer is made before a call; name one of them")
    else:
        survey = desk.survey(fleet, _ask(fleet, start, end, node, at, direction), terminal.progress)
        offered = offer_page(survey, quoting.offer(survey), kw, book.FROM_OFFER)
        written = book.write_offer(fleet, offered)
    terminal.put(show.pages_lines(written), show.pages_json(written))


def _ask(  # type: ignore[no-untyped-def]
    fleet: Path,
    start: str,
    end: str,
    node: str | None,
    at: str | None,
    direction: str,
    recovery: list[str] | None = None,
):
    """The ask of a command line: times in the fleet's zone, on its grid."""
    from fleet.asking import ask

    return ask(fleet, start, end, node, at or _now(), direction, recovery or ())


def _now() -> str:
    return datetime.now(UTC).replace(second=0, microsecond=0).isoformat()


def main() -> None:
    """Entry point of `shedwright`: known errors become a message on stderr and an exit code."""
    try:
        raise SystemExit(app(prog_name=NAME, standalone_mode=False))
    except WRONG_USAGE as error:
        lines, message = _usage(error)
        _fail("\n".join(lines), {"refused": [{"message": message}]}, REFUSED)
    except CannotBeMet as error:
        _fail(str(error), {"cannot_be_met": error.detail}, NOT_MET)
    except (FleetError, SitesError) as error:
        _fail(str(error), {"refused": parts(error)}, REFUSED)


def _usage(error: Any) -> tuple[list[str], str]:
    """What to say of arguments that do not fit, as lines and in a sentence; what came is made harmless first."""
    message = error.format_message()
    if not sys.argv[1:]:
        return message.split("\n"), message
    told = [] if error.ctx is None else [error.ctx.get_usage()]
    command = NAME if error.ctx is None else error.ctx.command_path
    return [*told, f"Try '{command} --help' for help.", "", f"Error: {harmless(message)}"], harmless(message)


def _fail(message: str, document: dict[str, object], code: int) -> None:
    Terminal("--json" in sys.argv).fail(message, document)
    raise SystemExit(code)
