"""A fleet's readings in Parquet, sorted by meter, settled row group by row group; beside a plain pandas group-by.

SHEDWRIGHT_SITES sets the size (10 000 sites x 60 days x 96 intervals are 58 million readings); the answers are
asserted. Prints seconds, the peak of memory and the ratio to the group-by of the same means.
"""

import os
import resource
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from made_settlement import call, times, utc

from fleet.rules import PRESETS
from fleet.settle import settle

SITES = int(os.environ.get("SHEDWRIGHT_SITES", "400"))
GROUP, DAYS, SAVED_KW = 200, 60, 100.0
START, END, HORIZON = utc("2025-07-10 15:00"), utc("2025-07-10 18:00"), utc("2025-07-12")
SECONDS_PER_SITE = 0.06
"""About ten times what an idle machine of two cores needs."""


def write(path: Path, ids: list[str], starts: pd.DatetimeIndex) -> None:
    """One row group per GROUP meters; every day the same shape, so that the saving comes out exactly."""
    hour = starts.tz_convert("America/New_York").hour.to_numpy()
    event = (starts >= START) & (starts < END)
    schema = pa.schema(
        [("meter_id", pa.string()), ("interval_start", pa.timestamp("us", tz="UTC")), ("kw", pa.float64())]
    )
    with pq.ParquetWriter(path, schema) as writer:
        for first in range(0, len(ids), GROUP):
            own = ids[first : first + GROUP]
            level = 300.0 + np.arange(first, first + len(own))[:, None]
            kw = level + 10.0 * hour - SAVED_KW * event
            arrays = [np.repeat(own, len(starts)), np.tile(starts.to_numpy(), len(own)), kw.ravel()]
            table = pa.Table.from_arrays([pa.array(part) for part in arrays[::2]], names=["meter_id", "kw"])
            at = pa.array(arrays[1], pa.timestamp("us")).cast(schema.field("interval_start").type)
            writer.write_table(table.add_column(1, "interval_start", at).cast(schema), row_group_size=1 << 30)


def grouped_means(frame: pd.DataFrame) -> pd.Series:
    """Ten-of-ten unadjusted by pandas alone: mean of the last ten weekdays at the event's slots, per meter."""
    local = frame["interval_start"].dt.tz_convert("America/New_York")
    day = local.dt.normalize()
    held = frame[(local.dt.hour.isin([15, 16, 17])) & (day.dt.day_of_week < 5) & (day < START.normalize())]
    days = day[held.index]
    days = days[days.dt.tz_localize(None) < pd.Timestamp("2025-07-10")]
    last = sorted(days.unique())[-11:]
    # The holiday of 4 July is none of them.
    last = [one for one in last if one.strftime("%m-%d") != "07-04"][-10:]
    kept = held.loc[days.index[days.isin(last)]]
    return kept.groupby([kept["meter_id"], local[kept.index].dt.time])["kw"].mean()


@pytest.mark.benchmark_run
def test_row_group_by_row_group(tmp_path: Path) -> None:
    starts = times(HORIZON - pd.Timedelta(days=DAYS), HORIZON, 15)
    ids = [f"site-{number:05d}" for number in range(SITES)]
    write(tmp_path / "meters.parquet", ids, starts)
    rule = PRESETS["ten_of_ten"]
    calls = [
        call(dict.fromkeys(ids[first : first + GROUP], rule), START, END, HORIZON, 15)
        for first in range(0, SITES, GROUP)
    ]
    began, delivered = time.perf_counter(), []
    file = pq.ParquetFile(tmp_path / "meters.parquet")
    for number, facts in enumerate(calls):
        result = settle(facts, file.read_row_group(number).to_pandas())
        delivered += result.sites["delivered_kwh"].tolist()
    seconds = time.perf_counter() - began
    assert delivered == pytest.approx([3.0 * SAVED_KW] * SITES)
    began = time.perf_counter()
    means = [grouped_means(file.read_row_group(number).to_pandas()) for number in range(len(calls))]
    plain = time.perf_counter() - began
    assert sum(len(part) for part in means) == 12 * SITES
    assert means[0].iloc[0] == pytest.approx(300.0 + 150.0)
    peak_gb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    print(
        f"{SITES} sites, {SITES * len(starts):,} readings: {seconds:.1f} s, {peak_gb:.2f} GB, "
        f"{seconds / plain:.1f} x the group-by ({plain:.1f} s)"
    )
    assert seconds < SECONDS_PER_SITE * SITES
