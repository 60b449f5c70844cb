"""README's commands run, in order, and say what README says they say."""

import re
import shutil
import subprocess
from decimal import Decimal
from pathlib import Path

import pytest
from conftest import Practice, shedwright

from fleet.reckoning import reckon

README = (Path(__file__).resolve().parents[1] / "README.md").read_text(encoding="utf-8")
PREFIX = "    .venv/bin/shedwright "


EDIT = "    sed "


def commands() -> list[str]:
    """Every indented command of the installed program, without its place."""
    return [line.removeprefix(PREFIX) for line in README.split("\n") if line.startswith(PREFIX)]


def lines_to_run() -> list[str]:
    """The same and the edits between them, in order."""
    lines = [line for line in README.split("\n") if line.startswith((PREFIX, EDIT))]
    return [line.removeprefix(PREFIX).strip() for line in lines]


def shown_of(heading: str) -> list[str]:
    """Lines of the first output shown below a heading."""
    return README.split(f"## {heading}\n")[1].split("```text\n")[1].split("\n```")[0].split("\n")


def test_the_first_two_commands_are_the_first_two_blocks() -> None:
    """What .ci/run does in a fresh clone."""
    blocks = [line.strip() for line in README.split("\n") if re.match(r" {4}\S", line)]
    assert blocks[0] == "python3 -m venv .venv && .venv/bin/pip install . && .venv/bin/shedwright rehearse"
    assert blocks[1] == ".venv/bin/pip install '.[test]' && .venv/bin/pytest"


def test_every_command_of_the_program_has_an_example(practice: Practice) -> None:
    helped = shedwright("--help", cwd=practice.folder)
    names = re.findall(r"^  ([a-z]+)  ", helped.stdout.split("Commands:")[1], flags=re.MULTILINE)
    shown = {line.split()[0] for line in commands()} | {"rehearse"}
    assert len(names) >= 9
    assert set(names) <= shown


def test_readmes_commands_run_one_by_one(practice: Practice, tmp_path: Path) -> None:
    shutil.copytree(practice.fleet, tmp_path / "rehearsal")
    said = {}
    for line in lines_to_run():
        if line.startswith(EDIT.strip()):
            before = (tmp_path / "rehearsal" / "nodes.csv").read_text()
            subprocess.run(line, shell=True, cwd=tmp_path, check=True)
            assert (tmp_path / "rehearsal" / "nodes.csv").read_text() != before
            continue
        ran = shedwright(*line.split(), cwd=tmp_path)
        said[line] = ran.stdout
        assert ran.returncode == 0, f"{line}: {ran.stderr}"
        assert ran.stdout
    sun = next(said[line] for line in said if "--event sun" in line)
    assert [line for line in shown_of("Absorb") if line not in sun.splitlines()] == []
    assert (tmp_path / "rehearsal" / "events" / "second" / "orders-001").is_dir()
    assert (tmp_path / "rehearsal" / "events" / "practice" / "settlement-002").is_dir()
    assert (tmp_path / "invented" / "rehearsals" / "1" / "events" / "practice" / "call-001").is_dir()


@pytest.mark.parametrize(
    "word", ["asked", "can give", "expected", "committed", "delivered", "true", "net cost"]
)
def test_the_output_shown_has_the_programs_own_lines(word: str) -> None:
    shown = README.split("```text\n")[1].split("```")[0]
    assert re.search(rf"^  {word} +-?[\d,.]+ ", shown, flags=re.MULTILINE)


def by_hand() -> list[tuple[str, str]]:
    """Both sides of every line of the site settled by hand."""
    shown = README.split("## One site by hand")[1].split("```text\n")[1].split("```")[0]
    lines = [line[16:].split(" = ") for line in shown.strip().split("\n")]
    return [(left, right) for left, right in lines]


def test_the_site_settled_by_hand_comes_out_line_by_line() -> None:
    for left, right in by_hand():
        assert re.fullmatch(r"[\d.+\-x/() ]+", left)
        digits = len(right.split(".")[1])
        # What a reader's own calculator says of the figures as shown; those in kW are rounded to three digits.
        slack = 0.0 if digits == 2 else 1.01 * 10.0**-digits if digits == 3 else 6e-6
        value = eval(left.replace("x", "*"))  # figures only, see above
        assert abs(value - float(right)) <= max(slack, 0.5001 * 10.0**-digits), (left, value)


def test_the_site_settled_by_hand_is_the_practised_one(practice: Practice) -> None:
    found = reckon(practice.fleet, "practice", "retail-02")
    slot = next(one for one in found["slots"] if (one["part"], one["local_time"]) == ("event", "18:00"))
    inside = [one for one in found["intervals"] if one["in_window"]]
    energy, adjustment, site = found["energy"], found["adjustment"], found["site"]
    days = " + ".join(f"{kw:.3f}" for kw in slot["kw_by_day"].values())
    usual, factor = f"{slot['mean_kw']:.3f}", f"{adjustment['applied']:.6f}"
    each = " + ".join(f"{one['delivered_kw']:.3f}" for one in inside)
    delivered, committed = f"{energy['delivered_kwh']:.3f}", f"{energy['committed_kwh']:.3f}"
    performance = f"{energy['performance_factor']:.6f}"
    cents = {
        name: f"{Decimal(site[name]):.2f}"
        for name in ("capacity_payment", "energy_payment", "penalty", "total")
    }
    paid, used, lack = cents["capacity_payment"], cents["energy_payment"], cents["penalty"]
    windows = f"{adjustment['event_day_window_kw']:.3f} / {adjustment['used_days_window_kw']:.3f}"
    assert by_hand() == [
        (f"({days}) / 10", usual),
        (windows, factor),
        (f"{usual} x {factor} - {inside[0]['metered_kw']:.3f}", f"{inside[0]['delivered_kw']:.3f}"),
        (f"({each}) x 0.25", delivered),
        (f"{delivered} / {committed}", performance),
        (f"0.3 x {committed} x {performance}", paid),
        (f"0.12 x {delivered}", used),
        (f"0.2 x ({delivered} - {committed})", lack),
        (f"{paid} + {used} - {lack.removeprefix('-')}", cents["total"]),
    ]
