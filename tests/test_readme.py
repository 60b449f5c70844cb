"""README's commands run, in order, and say what README says they say."""

import re
import shutil
from pathlib import Path

import pytest
from conftest import Practice, shedwright

README = (Path(__file__).resolve().parents[1] / "README.md").read_text(encoding="utf-8")
PREFIX = "    .venv/bin/shedwright "


def commands() -> list[str]:
    """Every indented command of the installed program, without its place."""
    return [line.removeprefix(PREFIX) for line in README.split("\n") if line.startswith(PREFIX)]


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
    for line in commands():
        ran = shedwright(*line.split(), cwd=tmp_path)
        assert ran.returncode == 0, f"{line}: {ran.stderr}"
        assert ran.stdout
    assert (tmp_path / "rehearsal" / "events" / "second" / "orders-001").is_dir()
    assert (tmp_path / "rehearsal" / "events" / "practice" / "settlement-002").is_dir()
    assert (tmp_path / "invented" / "rehearsals" / "1" / "events" / "practice" / "call-001").is_dir()


@pytest.mark.parametrize(
    "word", ["asked", "can give", "expected", "committed", "delivered", "true", "net cost"]
)
def test_the_output_shown_has_the_programs_own_lines(word: str) -> None:
    shown = README.split("```text\n")[1].split("```")[0]
    assert re.search(rf"^  {word} +-?[\d,.]+ ", shown, flags=re.MULTILINE)
