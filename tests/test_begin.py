import os
import re

import pytest
from conftest import shedwright
from made_workbook import two_sites, write_workbook

from fleet import begin as beginning
from fleet.begin import begin, begin_from, suggest_mapping
from fleet.check import report
from fleet.errors import FleetError, Refused
from fleet.schema import tables
from fleet.settings import Settings, parse_settings
from fleet.starter import MARK, example_files, settings_text


def test_a_new_folder_holds_every_table_and_check_names_every_example_row(tmp_path):
    begun = begin(tmp_path / "mine", {})
    assert sorted(path.name for path in (tmp_path / "mine").iterdir()) == sorted(
        ["fleet.toml", *(f"{name}.csv" for name in tables("fleet"))]
    )
    found = report(tmp_path / "mine")
    assert begun.to_mend == len(found.problems) == len(tables("fleet")) + 1
    said = [str(problem) for problem in found.problems]
    assert said[0] == (
        "fleet.toml, column name: came 'EXAMPLE fleet'; expected the settings of your fleet; "
        "write your fleet's name, timezone and currency"
    )
    assert said[1] == (
        "sites.csv, row 2: came the example row; expected rows of your fleet; replace it by your own rows"
    )
    assert said[-1] == (
        "meters.csv, row 2: came the example row; expected rows of your fleet; replace it by your own rows, "
        "or delete the file: this table is optional"
    )


def test_the_example_values_are_valid_but_for_their_mark(tmp_path):
    for name, text in example_files().items():
        (tmp_path / name).write_text(text.replace(MARK, "MY"), encoding="utf-8")
    found = report(tmp_path)
    assert found.problems == ()
    assert [ability.is_ok for ability in found.abilities] == [True, True, True]


def test_the_settings_file_speaks_of_every_setting():
    text = settings_text({})
    for name in Settings.model_fields:
        if name not in ("tables", "rules"):
            assert re.search(rf"^(# )?{name} = ", text, flags=re.MULTILINE), name
    assert parse_settings(text).name == "EXAMPLE fleet"
    every = re.sub(r"^# (\w+ = )(?!\"\.\.\.)", r"\1", text, flags=re.MULTILINE)
    assert parse_settings(every).energy_price_per_kwh == 0.18, "every line may be taken in"


def test_settings_given_are_written_whatever_signs_they_hold(tmp_path):
    name = 'Tower "A" \\ \x7f north'
    begin(tmp_path / "mine", {"name": name, "timezone": "Europe/Athens", "currency": "EUR"})
    text = (tmp_path / "mine/fleet.toml").read_text(encoding="utf-8")
    assert parse_settings(text).name == name
    with pytest.raises(Refused, match="Europe/Athen'; expected an IANA time zone"):
        begin(tmp_path / "other", {"timezone": "Europe/Athen"})
    assert not (tmp_path / "other").exists()


def test_a_folder_with_anything_in_it_is_refused_and_left(tmp_path):
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine/old.txt").write_text("kept")
    with pytest.raises(FleetError) as caught:
        begin(tmp_path / "mine", {})
    assert str(caught.value) == f"{tmp_path / 'mine'}: is not empty; name a new folder, nothing was written"
    assert [path.name for path in tmp_path.iterdir()] == ["mine"]
    with pytest.raises(FleetError, match=r"old\.txt: is a file; name a new folder, nothing was written$"):
        begin(tmp_path / "mine/old.txt", {})


def test_an_empty_folder_will_do_and_leftovers_of_a_killed_run_are_replaced(tmp_path):
    (tmp_path / "mine").mkdir()
    (tmp_path / ".mine.unfinished").mkdir()
    (tmp_path / ".mine.unfinished/sites.csv").write_text("half")
    begin(tmp_path / "mine", {})
    assert [path.name for path in tmp_path.iterdir()] == ["mine"]


@pytest.mark.parametrize("step", range(1, 6))
def test_a_disk_that_fills_at_any_step_leaves_nothing(tmp_path, monkeypatch, step):
    done = []

    def full(descriptor):
        done.append(descriptor)
        if len(done) == step:
            raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(FleetError) as caught:
        begin(tmp_path / "mine", {})
    assert str(caught.value) == (
        f"{tmp_path / 'mine'}: cannot be written (No space left on device); nothing was kept; "
        "free some space, mend the permissions or name another folder"
    )
    assert list(tmp_path.iterdir()) == []


def test_a_suggested_mapping_is_written_once_and_never_over_an_edited_one(tmp_path):
    book = write_workbook(tmp_path / "towers.xlsx")
    suggested = suggest_mapping(tmp_path / "mine", book)
    assert suggested.mapping == tmp_path / "towers.mapping.csv"
    assert not (tmp_path / "mine").exists()
    (tmp_path / "towers.mapping.csv").write_text("edited")
    with pytest.raises(FleetError) as caught:
        suggest_mapping(tmp_path / "mine", book)
    assert str(caught.value) == (
        f"{tmp_path}/towers.mapping.csv: is there already; when it is right, confirm it: shedwright begin "
        f"{tmp_path}/mine --from {book} --mapping {tmp_path}/towers.mapping.csv; "
        "remove it to have a mapping suggested anew"
    )
    assert (tmp_path / "towers.mapping.csv").read_text() == "edited"


def test_settings_nobody_gave_are_asked_for_and_options_go_before_the_workbook(tmp_path):
    sheets = two_sites()
    del sheets["Fleet"]
    book = write_workbook(tmp_path / "towers.xlsx", sheets)
    mapping = suggest_mapping(tmp_path / "mine", book).mapping
    with pytest.raises(Refused) as caught:
        begin_from(tmp_path / "mine", book, mapping, {"currency": "USD"})
    assert str(caught.value) == (
        "towers.xlsx, column timezone: came nothing; expected the fleet's timezone; give it by --timezone, or in a "
        "sheet Fleet with its name in the first column, its value in the second"
    )
    assert not (tmp_path / "mine").exists()
    given = {"timezone": "America/Chicago", "currency": "USD", "energy_price_per_kwh": 0.11}
    begun = begin_from(tmp_path / "mine", book, mapping, given)
    assert begun.to_mend == 0
    settings = parse_settings((tmp_path / "mine/fleet.toml").read_text(encoding="utf-8"))
    assert (settings.name, settings.energy_price_per_kwh) == ("towers", 0.11)
    assert settings.time_reading("weather") == "local"


def test_the_command_tells_both_ways_and_mapping_alone_is_wrong(tmp_path):
    ran = shedwright("begin", "mine", "--name", "Quay", cwd=tmp_path)
    assert ran.returncode == 0, ran.stderr
    assert ran.stdout == ("mine: 15 files written\n14 places to fill in; next: shedwright check mine\n")
    assert shedwright("check", "mine", cwd=tmp_path).returncode == 2
    wrong = shedwright("begin", "new", "--mapping", "x.csv", cwd=tmp_path)
    assert (wrong.returncode, wrong.stderr) == (
        2,
        "--mapping without --from: name the workbook it maps, too\n",
    )


def test_the_account_of_a_workbook(tmp_path):
    book = write_workbook(tmp_path / "towers.xlsx")
    mapping = suggest_mapping(tmp_path / "mine", book).mapping
    begun = begin_from(tmp_path / "mine", book, mapping, {})
    assert beginning.begun_lines(begun)[0] == f"{tmp_path / 'mine'}: 5 files written"
    assert begun.rows == {"sites": 2, "chillers": 4, "tanks": 2, "weather": 96}
    for note in (
        "chillers.capacity_kw_th = Chillers: Capacity (tons) x 3.516853; the first: 260 -> 914.382 kW_th",
        "chillers.rated_cop = 3.516853 / Chillers: Efficiency (kW/ton); the first: 0.58 -> 6.06354",
        "weather.dry_bulb_c = Weather: Outdoor temperature (F) x 0.5555556 -17.7778; the first: 74.8 -> 23.7778 degC",
        "fleet.toml.energy_price_per_kwh = Fleet: Energy price (USD/MWh) x 0.001; the first: 142 -> 0.142 money/kWh",
        "Weather: Humidity: 48 decimal commas read as points",
        "Buildings: Peak cooling (tons): 1 numbers written as text read as numbers",
        "Buildings: 1 blank rows left out",
        "Buildings: Building use: 'Court' is courthouse",
        "not used: Buildings: Architect",
        "weather: times without an offset are local time, America/Chicago",
    ):
        assert note in begun.notes
