"""Help, JSON, colour, width and progress: what the command prints where."""

import json
import os
import pty
import re
import subprocess
import sys
from typing import get_args, get_type_hints

import pytest
import typer
from commands import ASK, called_fleet, run
from demo_folders import short_fleet
from fleet_folders import write_small_fleet

from fleet import cli

COMMAND = typer.main.get_command(cli.app)
NAMES = sorted(COMMAND.commands)  # type: ignore[attr-defined]
HEAVY = (
    "numpy",
    "pandas",
    "pyarrow",
    "pulp",
    "highspy",
    "networkx",
    "numba",
    "jinja2",
    "pydantic",
    "holidays",
    "openpyxl",
    "numba",
)
IMPORTED = """
import sys
sys.argv = ["shedwright", *sys.argv[1:]]
from fleet.cli import main
try:
    main()
except SystemExit:
    pass
print(*sorted(name for name in sys.modules if "." not in name), file=sys.stderr)
"""


def python(code: str, *arguments: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-c", code, *arguments],
        capture_output=True,
        text=True,
        check=False,
        env=os.environ | environment,
    )


@pytest.mark.parametrize(
    ("arguments", "of_typer"), [(("--help",), set()), (("call", "--help"), {"pydantic"})]
)
def test_help_imports_nothing_heavy(arguments, of_typer):
    """Typer takes pydantic for a command's options where it is installed; nothing of ours may come on top."""
    ran = python(IMPORTED, *arguments)
    assert ran.stdout.startswith("Usage: ")
    assert set(HEAVY) & set(ran.stderr.split()) <= of_typer


def test_a_shell_completes_commands_and_options():
    """As a shell asks for it: the words so far and which of them the cursor is on."""
    completed = {}
    for words, at in (("shedwright qu", "1"), ("shedwright call --acc", "2")):
        environment = {"_SHEDWRIGHT_COMPLETE": "complete_bash", "COMP_WORDS": words, "COMP_CWORD": at}
        completed[words] = python("from fleet.cli import main; main()", **environment).stdout.split()
    assert completed == {"shedwright qu": ["quote"], "shedwright call --acc": ["--accept-less"]}


@pytest.mark.parametrize("name", NAMES)
def test_help_of_each_command_has_an_example_of_it(name):
    text = run(name, "--help").out
    assert re.search(rf"Example: shedwright {name}\b", text), text
    assert "--json" in text
    example = text.split("Example: ")[1].split("\n\n")[0]
    options = set(re.findall(r"--[a-z-]+", example))
    known = {option for parameter in COMMAND.commands[name].params for option in parameter.opts}  # type: ignore[attr-defined]
    assert options <= known


@pytest.mark.parametrize("width", ["20", "40", "200"])
@pytest.mark.parametrize("colour", [{"NO_COLOR": "1"}, {"FORCE_COLOR": "1"}, {"TERM": "dumb"}])
def test_help_has_no_escape_code_at_any_width(width, colour):
    ran = python(IMPORTED, "--help", COLUMNS=width, **colour)
    assert "shedwright" in ran.stdout
    assert "\x1b" not in ran.stdout


def documents(path):
    """Arguments of every command but `rehearse`, whose document conftest.py reads, with the code it ends with."""
    fleet = called_fleet(path)
    bad = write_small_fleet(path / "bad", settings="name =")
    return {
        "columns": (("columns", "tanks"), 0),
        "check": (("check", fleet), 0),
        "check of a bad folder": (("check", bad), 2),
        "check of nothing": (("check", path / "none"), 2),
        "quote": (("quote", fleet, *ASK), 0),
        "call": (("call", fleet, "--kw", "10", *ASK, "--purpose", "rehearsal"), 0),
        "call not met": (("call", fleet, "--kw", "300", *ASK, "--event", "B"), 3),
        "call refused": (("call", fleet, "--kw", "0", *ASK), 2),
        "orders": (("orders", fleet, "A"), 0),
        "settle": (("settle", fleet, "A"), 0),
        "reckon": (("reckon", fleet, "A", "harbour"), 0),
        "audit": (("audit", fleet, "A"), 0),
        "sample": (("sample", path / "sample", "--sites", "1"), 0),
        "begin": (("begin", path / "begun"), 0),
        "no such option": (("check", fleet, "--bogus"), 2),
        "no such command": (("frob",), 2),
    }


def test_json_is_one_document_and_nothing_else_on_stdout(tmp_path):
    for name, (arguments, code) in documents(tmp_path).items():
        ran = run(*arguments, "--json")
        assert ran.code == code, (name, ran)
        assert isinstance(json.loads(ran.out), dict | list), name
        assert bool(ran.err) == ((code == 2 and name != "check of a bad folder") or code == 3), (
            name,
            ran.err,
        )


USAGE = {
    ("frob",): ("shedwright", "[OPTIONS] COMMAND [ARGS]...", "No such command 'frob'."),
    ("check", "x", "--jsn"): (
        "shedwright check", "[OPTIONS] {FLEET}", "No such option: --jsn (Possible options: --json)",
    ),
    ("orders", "x"): ("shedwright orders", "[OPTIONS] {FLEET} {EVENT}", "Missing argument 'EVENT'."),
    ("orders", "x", "A", "B"): (
        "shedwright orders", "[OPTIONS] {FLEET} {EVENT}", "Got unexpected extra argument(s) (B)",
    ),
    ("quote", "x"): ("shedwright quote", "[OPTIONS] {FLEET}", "Missing option '--from'."),
    ("call", "x", "--kw"): ("shedwright", "", "Option '--kw' requires an argument."),
}  # fmt: skip


@pytest.mark.parametrize("arguments", USAGE, ids=" ".join)
def test_wrong_usage_is_told_with_the_way_to_help_and_exit_code_2(arguments):
    command, rest, message = USAGE[arguments]
    ran = run(*arguments)
    assert (ran.code, ran.out) == (2, "")
    usage = f"Usage: {command} {rest}\n" if rest else ""
    assert ran.err == f"{usage}Try '{command} --help' for help.\n\nError: {message}\n"
    if arguments[-1] != "--kw":
        assert json.loads(run(*arguments, "--json").out)["refused"] == [{"message": message}]


def test_a_call_that_asks_for_kw_without_a_time_is_told_both_ways_to_ask():
    ran = run("call", "x", "--kw", "10")
    told = "--from, --to missing: give --kw with --from and --to, or --request FILE instead of all three"
    assert (ran.code, ran.out, ran.err) == (2, "", f"{told}\n")


def options():
    """Command and name of every option that takes a number, as the functions declare them."""
    found = []
    for name in NAMES:
        for parameter, hint in get_type_hints(getattr(cli, name)).items():
            if {int, float} & {hint, *get_args(hint)}:
                given = COMMAND.commands[name].params  # type: ignore[attr-defined]
                found += [(name, one.opts[0]) for one in given if one.name == parameter]
    return found


def test_a_number_that_is_none_is_refused_for_every_option():
    tried = options()
    assert {("call", "--kw"), ("sample", "--sites"), ("settle", "--again"), ("begin", "--price")} <= set(
        tried
    )
    for name, option in tried:
        ran = run(name, "x", option, "many")
        assert (ran.code, ran.out) == (2, ""), (name, option)
        assert f"Error: Invalid value for '{option}': " in ran.err


@pytest.mark.parametrize(
    "arguments",
    [
        ("\x1b[31mx",),
        ("check", "--\x1b]0;t\x07"),
        ("orders", "a", "b", "\x9b2J\nx"),
        ("sample", "x", "--sites", "\u202e"),
    ],
)
def test_arguments_that_would_steer_a_terminal_are_told_harmlessly(arguments):
    for more in ((), ("--json",)):
        ran = run(*arguments, *more)
        assert ran.code == 2
        assert not re.search("[\x00-\x09\x0b-\x1f\x7f-\x9f\u202a-\u202e]", ran.out + ran.err), ran
        assert ran.err.count("\n") == 4, "a line's end in an argument makes no line"


def test_a_refusal_in_json_holds_its_parts():
    ran = run("call", "none", "--kw", "0", *ASK, "--json")
    problem, message = json.loads(ran.out)["refused"]
    assert message == {"message": "none: there is no such fleet folder; `shedwright begin none` starts one"}
    assert problem == {
        "file": "call",
        "row": None,
        "column": "kw",
        "came": "0.0",
        "expected": "a finite number above 0",
        "advice": "kW are positive in the event's direction; for the other way use --direction",
    }
    assert ran.err.startswith("call, column kw: came 0.0; ")


def test_progress_is_shown_on_a_terminal_only(tmp_path):
    fleet = write_small_fleet(tmp_path)
    command = [sys.executable, "-c", "from fleet.cli import main; main()", "check", str(fleet), "--json"]
    piped = subprocess.run(command, capture_output=True, check=True)
    assert piped.stderr == b""
    ours, theirs = pty.openpty()
    watched = subprocess.run(command, stdout=subprocess.PIPE, stderr=theirs, check=True)
    os.close(theirs)
    shown = os.read(ours, 10_000)
    os.close(ours)
    assert shown == b"\r\x1b[2Kchecking ...\r\x1b[2K", "shown, then wiped away"
    assert watched.stdout == piped.stdout


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="there is no /dev/full")
def test_a_full_disk_behind_stdout_is_said_and_a_closed_pipe_is_no_error():
    code = "from fleet.cli import main; main()"
    command = [sys.executable, "-c", code, "columns"]
    with open("/dev/full", "w") as full:
        ran = subprocess.run(command, stdout=full, stderr=subprocess.PIPE, text=True, check=False)
    assert (ran.returncode, ran.stderr) == (
        2,
        "standard output cannot be written (No space left on device); what the command did is done; "
        "free some space or send the output elsewhere\n",
    )
    reader, writer = os.pipe()
    os.close(reader)
    ran = subprocess.run(command, stdout=writer, stderr=subprocess.PIPE, text=True, check=False)
    os.close(writer)
    assert (ran.returncode, ran.stderr) == (0, "")


def test_a_terminal_that_knows_ascii_only_gets_the_rest_spelled_out(tmp_path):
    ran = python(
        "from fleet.cli import main; main()", "check", str(tmp_path / "naïve"), PYTHONIOENCODING="ascii"
    )
    assert ran.returncode == 2
    assert "na\\xefve: there is no such fleet folder" in ran.stderr


def test_the_invented_fleet_passes_without_an_unlikely_value():
    ran = run("check", short_fleet(10).path, "--json")
    assert [note for note in json.loads(ran.out)["notes"] if "unlikely" in note] == []
