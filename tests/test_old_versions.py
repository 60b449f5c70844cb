"""Settlements made by earlier versions: working one out again names the version to use, and a new revision posts
only what is due. One small fleet folder a version lies in reference/settled/, as that version wrote it."""

import shutil
import tomllib
from decimal import Decimal
from pathlib import Path

import pandas as pd
import pytest

from fleet import records, settling
from fleet.errors import FleetError
from fleet.settling import settle_again, settle_event

HERE = Path(__file__).parent
OLD = sorted((HERE / "reference" / "settled").iterdir())
NOW = tomllib.loads((HERE.parent / "pyproject.toml").read_text())["project"]["version"]


@pytest.fixture(params=OLD, ids=lambda path: path.name)
def old(request: pytest.FixtureRequest, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> tuple[str, Path]:
    """A version and its folder; this program speaks of itself as its sources do, however it was installed."""
    monkeypatch.setattr(settling, "version", lambda name: NOW)
    shutil.copytree(request.param, tmp_path / "fleet")
    return request.param.name, tmp_path / "fleet"


def test_working_it_out_again_names_the_version_to_use(old: tuple[str, Path]) -> None:
    version, home = old
    with pytest.raises(FleetError) as caught:
        settle_again(home, "e1", 1)
    text = str(caught.value)
    assert text.startswith(
        f"event e1, settlement revision 1: was made by shedwright {version}; this is {NOW} and gives other bytes in "
    )
    assert text.endswith("; use that version")
    assert "sites.parquet" in text


def test_a_new_revision_on_the_same_readings_posts_nothing(old: tuple[str, Path]) -> None:
    _, home = old
    before = records.read_settlement(home, "e1").frames
    settled = settle_event(home, "e1")
    assert settled.revision == 2
    after = records.read_settlement(home, "e1").frames
    assert after["postings"]["amount"].tolist() == [Decimal(0)]
    known = [name for name in before["sites"].columns if name not in ("revision", "netted_kwh")]
    pd.testing.assert_frame_equal(after["sites"][known], before["sites"][known])
