"""What plant meters of past days make of a fleet: loads, efficiencies, notes; and what is left alone."""

from functools import cache
from pathlib import Path
from tempfile import mkdtemp

import numpy as np
import pandas as pd
from demo_folders import short_fleet

from demo_fleet.calendar import EVENT_DAY
from fleet import plant_history, records
from fleet.assemble import Fleet, assemble
from fleet.folder import FleetFolder, open_folder
from fleet.past_days import read_past
from sites.past import YARDSTICK_CV

START = np.datetime64(f"{EVENT_DAY}T10:00", "us")
END = START + np.timedelta64(35, "h")


@cache
def folder() -> FleetFolder:
    """An invented fleet whose chillers are rated 10 % better than those that the meters saw."""
    source, home = short_fleet(12).path, Path(mkdtemp()) / "rated-too-well"
    home.mkdir()
    for path in source.iterdir():
        if path.name not in ("chillers.csv", ".truth"):
            (home / path.name).symlink_to(path)
    chillers = pd.read_csv(source / "chillers.csv", dtype=str, keep_default_na=False)
    better = pd.to_numeric(chillers["rated_cop"]) * 1.1
    chillers.assign(rated_cop=better.map("{:.4g}".format).where(better.notna(), "")).to_csv(
        home / "chillers.csv", index=False
    )
    return open_folder(home, without=("meters",))


@cache
def plain() -> Fleet:
    return assemble(folder(), START, END)


@cache
def with_past() -> Fleet:
    return plant_history.with_history(folder(), plain(), records.events(folder().path))


def metered_sites() -> list[str]:
    meters = folder().frames["meter_map"]
    return sorted(meters.loc[meters["role"] == "plant", "site_id"])


def test_only_sites_with_a_plant_meter_change_and_each_change_is_marked_fitted() -> None:
    before, after = plain().roster.chillers.rated_cop, with_past().roster.chillers.rated_cop
    names = plain().roster.buildings.site_id
    changed = {str(name) for name in names[(before != after).any(axis=1)]}
    told = {one.key for one in with_past().assumed if one.why.startswith("fitted: factor on the rated COP")}
    assert changed == told
    assert len(changed) >= 1
    assert changed <= set(metered_sites())
    frame = with_past().resolved["chillers"]
    for name in changed:
        row = int(np.flatnonzero(names == name)[0])
        np.testing.assert_allclose(
            np.sort(frame.loc[frame["site_id"] == name, "rated_cop"]),
            np.sort(after[row][plain().roster.chillers.exists[row]]),
        )
    np.testing.assert_array_equal(plain().outlook.cooling_load_kw_th, with_past().outlook.cooling_load_kw_th)


def test_usual_operation_comes_nearer_to_the_meters() -> None:
    past = read_past(folder(), plain(), records.events(folder().path))
    assert past is not None
    match, rows = plant_history._match(plain(), past.whole_days)
    assert len(rows) >= 3
    fitted = match.efficiency != 1.0
    assert (match.corrected_cv_rmse[fitted] < match.cv_rmse[fitted]).all()
    # The best of them is within the yardstick, and its machines are found to be as the meter saw them: 1 / 1.1 of the
    # table's, within what its own hidden condition, 3.5 % or so, allows.
    best = int(np.nanargmin(match.corrected_cv_rmse))
    assert match.corrected_cv_rmse[best] < 1.1 * YARDSTICK_CV
    np.testing.assert_allclose(match.efficiency[best], 1.0 / 1.1, atol=0.05)
    note = next(note for note in with_past().notes if note.startswith("usual operation beside the plant"))
    assert f"of {len(rows)} sites over 1" in note


def bare_folder() -> Path:
    """The same fleet with no load table and no tanks."""
    home = Path(mkdtemp()) / "bare"
    home.mkdir()
    source = short_fleet(12).path
    for path in source.iterdir():
        if path.name not in ("loads", "loads.parquet", "tanks.csv", "status.csv") and path.name[0] != ".":
            (home / path.name).symlink_to(path)
    sites = pd.read_csv(source / "sites.csv", dtype=str)
    (home / "sites.csv").unlink()
    sites.assign(held_back_kwh_th="0").to_csv(home / "sites.csv", index=False)
    return home


def test_a_site_without_loads_gets_them_from_its_meter_and_says_how_good_they_are() -> None:
    home = bare_folder()
    opened = open_folder(home, without=("meters",))
    fleet = assemble(opened, START, END)
    after = plant_history.with_history(opened, fleet, records.events(home))
    changed = (fleet.outlook.cooling_load_kw_th != after.outlook.cooling_load_kw_th).any(axis=1)
    names = {str(name) for name in fleet.roster.buildings.site_id[changed]}
    told = {one.key: one.why for one in after.assumed if one.why.startswith("fitted to 1")}
    assert set(told) == names
    assert names <= set(metered_sites())
    for why in told.values():
        assert "CV(RMSE) " in why
        assert " of 30%, spread " in why


def test_readings_that_cannot_be_used_are_told_and_change_nothing(tmp_path: Path) -> None:
    source = short_fleet(12).path
    for path in source.iterdir():
        if path.name[0] != "." and path.name not in ("meters", "meters.parquet"):
            (tmp_path / path.name).symlink_to(path)
    meter = folder().frames["meter_map"]
    meter_id = meter.loc[meter["role"] == "plant", "meter_id"].iloc[0]
    (tmp_path / "meters.csv").write_text(
        f"meter_id,interval_start,kw\n{meter_id},2026-07-10T10:00:00Z,x\n", encoding="utf-8"
    )
    opened = open_folder(tmp_path, without=("meters",))
    fleet = assemble(opened, START, END)
    after = plant_history.with_history(opened, fleet, records.events(tmp_path))
    assert after.notes[-1].startswith(
        "plant meters' past is not used: meters.csv, row 2, column kw: came 'x';"
    )
    assert after.assumed == fleet.assumed
    assert after.roster is fleet.roster
