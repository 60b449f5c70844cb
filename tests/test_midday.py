"""A whole rehearsal of an absorb as the installed command plays it, read from outside."""

import json
from pathlib import Path

import pandas as pd
import pytest
from conftest import shedwright


@pytest.mark.slow
def test_a_midday_rehearsal_asks_charges_settles_and_holds(tmp_path: Path) -> None:
    ran = shedwright("rehearse", "--midday", "--json", cwd=tmp_path)
    assert ran.returncode == 0, ran.stderr
    told = json.loads(ran.stdout)
    assert told["audit"]["holds"] is True
    assert min(told["call"]["expected_kw"]) >= told["call"]["requested_kw"][0] - 1e-6
    assert told["call"]["proof"]["bound"] <= told["call"]["proof"]["objective"]
    assert told["settlement"]["delivered_kwh"] == pytest.approx(told["true_kwh"], rel=0.15)
    record = tmp_path / "rehearsal" / "events" / "practice"
    request, windows, steps = (
        pd.read_parquet(record / "call-001" / f"{name}.parquet") for name in ("request", "windows", "steps")
    )
    assert set(request["direction"]) == {"absorb"}
    assert windows["chiller_ids"].map(len).max() == 0
    assert {"charge_to", "charge_end"} <= set(steps["action"])
    assert "off" not in set(steps["action"])
    price = pd.read_parquet(record / "call-001" / "frozen" / "tariffs.parquet")["price_per_kwh"]
    assert price.min() < 0.0
    assert windows["cost_during"].sum() < 0.0
    called = set(told["call"]["called_sites"])
    pages = list((record / "orders-001").glob("*.txt"))
    assert len(pages) == len(called) >= 5
    assert all("take up load" in page.read_text(encoding="utf-8") for page in pages)
    assert any("energy prices below zero" in note for note in told["call"]["notes"])
    assert (tmp_path / "rehearsal" / "pages" / "index.html").is_file()
