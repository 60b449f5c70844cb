"""The command line's arguments and options: names, types and help of each, used by the commands of cli.py."""

from pathlib import Path
from typing import Annotated

import typer

FleetDir = Annotated[Path, typer.Argument(metavar="FLEET", help="The fleet folder.")]
EventId = Annotated[str, typer.Argument(metavar="EVENT", help="The event's id.")]
Json = Annotated[bool, typer.Option("--json", help="Print one JSON document on stdout and nothing else.")]
From = Annotated[str, typer.Option("--from", help="Start of the event: ISO 8601 with offset, or local time.")]
To = Annotated[str, typer.Option("--to", help="End of the event.")]
MaybeFrom = Annotated[str | None, typer.Option("--from", help="Start of the event; with --kw and --to.")]
MaybeTo = Annotated[str | None, typer.Option("--to", help="End of the event.")]
Node = Annotated[
    str | None, typer.Option("--node", help="Where the request is held; default the whole fleet.")
]
At = Annotated[str | None, typer.Option("--at", help="When the call is made; default now.")]
Way = Annotated[str, typer.Option("--direction", help="shed or absorb.")]
Recovery = Annotated[
    list[str] | None,
    typer.Option(
        "--recovery",
        help="When tanks are brought back: usual, now, delayed, night, midday, capped or every; repeat it. Default: "
        "usual, and every one where a feeder's limit or a billed peak could be met.",
    ),
]
RequestFile = Annotated[
    Path | None,
    typer.Option("--request", help="CSV or Parquet with interval_start, kw, node_id; no --kw then."),
]
AskedKw = Annotated[float | None, typer.Option("--kw", help="kW asked in every interval of the event.")]
NewEvent = Annotated[str | None, typer.Option("--event", help="Id of the event; default from time and node.")]
Purpose = Annotated[str, typer.Option("--purpose", help="real, test or rehearsal.")]
AcceptLess = Annotated[
    bool, typer.Option("--accept-less", help="Where it cannot be met, take the best answer.")
]
Within = Annotated[
    float | None,
    typer.Option("--within", help="Seconds for the choice: the best found by then counts, even if short."),
]
Include = Annotated[
    list[str] | None, typer.Option("--include", help="A site that must be called; repeat it.")
]
Exclude = Annotated[
    list[str] | None, typer.Option("--exclude", help="A site that must not be called; repeat it.")
]
Fewest = Annotated[bool, typer.Option("--fewest", help="As few sites as can be, whatever they cost.")]
MostOver = Annotated[
    float | None, typer.Option("--most-over", help="kW above the request at most, in any interval.")
]
Readings = Annotated[
    Path | None,
    typer.Option(
        "--meter",
        help="Readings that replace the folder's for the same intervals: CSV, Parquet or an interval-data feed (.xml).",
    ),
]
Excuse = Annotated[
    list[str] | None, typer.Option("--excuse", help="A site that earns and owes nothing; repeatable.")
]
Readmit = Annotated[
    list[str] | None, typer.Option("--readmit", help="An excused site that counts again; repeatable.")
]
Why = Annotated[
    str, typer.Option("--why", help="Why the sites are excused or readmitted; kept in the record.")
]
Who = Annotated[str, typer.Option("--who", help="Who decided that; kept in the record.")]
Again = Annotated[
    int | None,
    typer.Option("--again", help="Work this old revision out again and compare its bytes; writes nothing."),
]
Book = Annotated[Path | None, typer.Option("--from", help="A workbook (.xlsx) with one sheet per table.")]
Mapping = Annotated[
    Path | None,
    typer.Option("--mapping", help="The mapping file of its headings, read and confirmed by you."),
]
