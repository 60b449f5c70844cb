"""The compiled loop over rows: it says what the array-faced models say, and is kept where it can be."""

import errno
import sys
from pathlib import Path

import numpy as np
import pytest
from made_sites import made_outlook, made_roster, made_standing

from sites import chiller, comfort, compiled, tank
from sites.ground import Ground, ground
from sites.tank import lmtd_k


@pytest.fixture(scope="module")
def base() -> Ground:
    roster = made_roster()
    return ground(roster, made_outlook(roster), made_standing(roster))


def test_losses_and_limits_are_those_of_the_tank_models(base: Ground) -> None:
    run, tanks = base.usual, base.roster.tanks
    for t in (0, 20, 60, 100):
        start, end = run.inventory_start_kwh_th[:, :, t], run.inventory_kwh_th[:, :, t]
        loss = tank.standing_loss_kw_th(
            tanks.kind, start, tanks.capacity_kwh_th, tanks.loss_fraction_per_h, base.here.step_h
        )
        np.testing.assert_allclose(run.loss_kw_th[:, :, t], loss, rtol=1e-13)
        knots = tank.knots_kw_th(
            base.here.discharge, tanks.capacity_kwh_th, tanks.discharge_limit_kw_th, run.lmtd_k[:, :, t]
        )
        limit = tank.limit_kw_th(end, tanks.capacity_kwh_th, knots)
        np.testing.assert_allclose(run.discharge_limit_kw_th[:, :, t], limit, rtol=1e-13, atol=1e-12)
    parallel = np.array([0, 2, 4])
    back = lmtd_k(base.roster.buildings.return_c, base.roster.buildings.supply_c)[parallel]
    np.testing.assert_allclose(run.lmtd_k[parallel, 0, 0], back, rtol=1e-14)


def test_machine_power_is_that_of_the_chiller_model(base: Ground) -> None:
    run, chillers = base.usual, base.roster.chillers
    made = run.direct_kw_th + run.into_tank_kw_th
    able = np.where(run.making_ice, base.here.ice_kw_th, base.here.direct_kw_th)
    full = np.where(run.making_ice, base.here.ice_full_kw, base.here.direct_full_kw)
    power = chiller.part_load_power_kw(
        made.swapaxes(1, 2), able.swapaxes(1, 2), full.swapaxes(1, 2), chillers.kind[:, None, :]
    ).swapaxes(1, 2)
    own = np.where(made > 0.0, chillers.dedicated_aux_kw[:, :, None], 0.0)
    assert run.making_ice.any() and (made > 0.0).any()
    np.testing.assert_allclose(run.machine_kw, power + own, rtol=1e-12, atol=1e-9)


def test_a_zone_drifts_as_the_comfort_model_says() -> None:
    """Six sites with every machine off and no tank from 16:00 to 17:30: what goes unmet warms them."""
    from sites.candidate import Stages
    from sites.plant import at_rest, simulate

    roster = made_roster((5, 5))
    base = ground(roster, made_outlook(roster), made_standing(roster))
    off = Stages(np.full((2, 1), 12), np.full((2, 1), 18), np.zeros((2, 1, 3)))
    start = at_rest(np.zeros((2, 2)))
    run = simulate(base.plants, base.here, off, start, base.usual.as_usual)
    zone = comfort.two_node(roster.buildings, base.here.step_h)
    air = mass = np.zeros(2)
    for t in range(run.power_kw.shape[1]):
        net = run.unmet_kw_th[:, t] - base.usual.unmet_kw_th[:, t] - run.pull_down_kw_th[:, t]
        air, mass, mean = comfort.advance(zone, air, mass, net)
        for name, values in (("air_rise_k", air), ("mass_rise_k", mass), ("air_mean_rise_k", mean)):
            np.testing.assert_allclose(getattr(run, name)[:, t], values, atol=1e-12)
    assert run.air_rise_k.max() > 1.0


def tiny(values: np.ndarray) -> None:
    """A loop that compiles in a moment."""
    for i in range(len(values)):
        values[i] = compiled.larger(values[i], 1.0)


def test_a_loop_is_kept_in_the_first_folder_that_can_be_written(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    blocked = tmp_path / "file"
    blocked.write_text("no folder")
    monkeypatch.setattr(compiled, "_folders", lambda: (blocked, tmp_path / "own"))
    assert not compiled.is_kept()
    values = np.array([0.5, 2.0])
    compiled.loop(tiny)(values)
    np.testing.assert_array_equal(values, [1.0, 2.0])
    assert compiled.is_kept()
    assert [path.parts[-4:-2] for path in tmp_path.rglob("*.nbi")] == [("own", compiled._name())]


def test_loops_of_earlier_code_are_swept_beside_the_code_only(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    beside, users = tmp_path / "beside", tmp_path / "users"
    earlier = f"compiled-0123456789abcdef-{sys.implementation.cache_tag}"
    for folder in (beside, users):
        (folder / earlier).mkdir(parents=True)
    monkeypatch.setattr(compiled, "_folders", lambda: (beside, users))
    compiled.loop(tiny)(np.array([0.5, 2.0]))
    assert [path.name for path in beside.iterdir()] == [compiled._name()]
    assert [path.name for path in users.iterdir()] == [earlier]


def test_a_loop_runs_where_nothing_can_be_kept(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    blocked = tmp_path / "file"
    blocked.write_text("no folder")
    monkeypatch.setattr(compiled, "_folders", lambda: (blocked, blocked))
    values = np.array([0.5, 2.0])
    compiled.loop(tiny)(values)
    np.testing.assert_array_equal(values, [1.0, 2.0])
    assert not compiled.is_kept()


def test_a_full_disk_leaves_the_loop_running(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from numba.core.caching import IndexDataCacheFile

    def full(*_: object) -> None:
        raise OSError(errno.ENOSPC, "no space left")

    monkeypatch.setattr(compiled, "_folders", lambda: (tmp_path,))
    monkeypatch.setattr(IndexDataCacheFile, "save", full)
    values = np.array([0.5, 2.0])
    compiled.loop(tiny)(values)
    np.testing.assert_array_equal(values, [1.0, 2.0])
    assert not compiled.is_kept()


def test_changed_code_has_another_name(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "tank.py").write_text("LIMIT = 1\n")
    monkeypatch.setattr(compiled, "__file__", str(tmp_path / "compiled.py"))
    names = set()
    for text in ("LIMIT = 1\n", "LIMIT = 2\n"):
        (tmp_path / "tank.py").write_text(text)
        names.add(compiled._name.__wrapped__())
    assert len(names) == 2


def test_parts_come_back_in_order() -> None:
    assert compiled.each(lambda i: i * i, 7) == [0, 1, 4, 9, 16, 25, 36]
    assert compiled.cores() >= 1
