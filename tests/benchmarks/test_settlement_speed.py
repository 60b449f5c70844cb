"""How long a settlement takes as the fleet grows; the answers are asserted on the way."""

import time

import numpy as np
import pandas as pd
import pytest
from made_settlement import call, times, utc

from fleet.rules import PRESETS
from fleet.settle import settle

DAYS, SAVED_KW = 150, 100.0
LONGEST_SECONDS = {10: 3.0, 40: 6.0}
"""About ten times what an idle machine of two cores needs."""


@pytest.mark.benchmark_run
@pytest.mark.parametrize("sites", LONGEST_SECONDS)
def test_quarter_hours_of_150_days(sites: int) -> None:
    start, end, horizon = utc("2025-07-10 15:00"), utc("2025-07-10 18:00"), utc("2025-07-12")
    starts = times(horizon - pd.Timedelta(days=DAYS), horizon, 15)
    ids = [f"site-{number:03d}" for number in range(sites)]
    # The same shape every day, so that the saving comes out exactly.
    local = starts.tz_convert("America/New_York")
    kw = np.arange(sites)[:, None] + 300.0 + 10.0 * local.hour.to_numpy()
    kw[:, (starts >= start) & (starts < end)] -= SAVED_KW
    frame = pd.DataFrame(
        {"meter_id": np.repeat(ids, len(starts)), "interval_start": np.tile(starts, sites), "kw": kw.ravel()}
    )
    names = ("ten_of_ten", "high_five_of_ten")
    facts = call({site: PRESETS[names[at % 2]] for at, site in enumerate(ids)}, start, end, horizon, 15)
    began = time.perf_counter()
    result = settle(facts, frame)
    seconds = time.perf_counter() - began
    assert result.sites["delivered_kwh"].tolist() == pytest.approx([3.0 * SAVED_KW] * sites)
    assert (result.sites["state"] == "final").all()
    assert seconds < LONGEST_SECONDS[sites], f"{seconds:.1f} s for {sites} sites"
