"""A fleet's readings in Parquet, sorted by meter, settled row group by row group; beside a plain pandas group-by.

SHEDWRIGHT_SITES sets the size (10 000 sites x 60 days x 96 intervals are 58 million readings). Both give each site's
delivered kWh under ten-of-ten with its same-day adjustment, and are asserted equal. Prints seconds of the clock and of
the processors, the peak of memory and the ratio of the two; the tables' writing is told apart.
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
from made_settlement import NEW_YORK, call, times, utc

from fleet.meter_groups import GroupedReadings
from fleet.rules import PRESETS
from fleet.schema import table
from fleet.settle import settle
from fleet.tables import write_parquet
from fleet.values import Reading

SITES = int(os.environ.get("SHEDWRIGHT_SITES", "400"))
GROUP, DAYS = 200, 60
START, END, HORIZON = utc("2025-07-10 15:00"), utc("2025-07-10 18:00"), utc("2025-07-12")
SECONDS_PER_SITE = 0.03
"""Twenty times the goal of 15 s for 10 000 sites on two idle cores: tells a blunder, not a busy machine."""


def write(path: Path, ids: list[str], starts: pd.DatetimeIndex) -> None:
    """One row group per GROUP meters: a daily shape, a level of each site's own and noise; shed in the event."""
    hour = starts.tz_convert(NEW_YORK).hour.to_numpy()
    event = (starts >= START) & (starts < END)
    schema = pa.schema(
        [("meter_id", pa.string()), ("interval_start", pa.timestamp("us", tz="UTC")), ("kw", pa.float64())]
    )
    rng = np.random.default_rng(7)
    with pq.ParquetWriter(path, schema) as writer:
        for first in range(0, len(ids), GROUP):
            own = ids[first : first + GROUP]
            level = 300.0 + np.arange(first, first + len(own))[:, None]
            kw = level + 10.0 * hour - 100.0 * event + rng.normal(0.0, 20.0, (len(own), len(starts)))
            at = pa.array(np.tile(starts.to_numpy(), len(own)), pa.timestamp("us"))
            arrays = [
                pa.array(np.repeat(own, len(starts))),
                at.cast(schema.field("interval_start").type),
                pa.array(np.round(kw.ravel(), 2)),
            ]
            writer.write_table(pa.Table.from_arrays(arrays, schema=schema), row_group_size=1 << 30)


def grouped(frame: pd.DataFrame) -> pd.Series:
    """Delivered kWh per meter by pandas alone: last ten weekdays that are no holiday, ratio within 20 %."""
    local = frame["interval_start"].dt.tz_convert(NEW_YORK)
    day = local.dt.normalize().dt.tz_localize(None)
    frame = frame.assign(day=day, hour=local.dt.hour, slot=local.dt.hour * 4 + local.dt.minute // 15)
    frame = frame[frame["hour"].isin([11, 12, 13, 15, 16, 17])]
    today = pd.Timestamp("2025-07-10")
    like = frame[(frame["day"] < today) & (frame["day"].dt.day_of_week < 5)]
    like = like[like["day"] != pd.Timestamp("2025-07-04")]
    like = like[like["day"].isin(sorted(like["day"].unique())[-10:])]
    own = frame[frame["day"] == today]
    usual_window = like[like["hour"] < 15].groupby("meter_id")["kw"].mean()
    own_window = own[own["hour"] < 15].groupby("meter_id")["kw"].mean()
    ratio = (own_window / usual_window).clip(0.8, 1.2)
    usual = like[like["hour"] >= 15].groupby(["meter_id", "slot"])["kw"].mean().groupby("meter_id").sum()
    metered = own[own["hour"] >= 15].groupby("meter_id")["kw"].sum()
    return (usual * ratio - metered) / 4.0


@pytest.mark.benchmark_run
def test_row_group_by_row_group(tmp_path: Path) -> None:
    starts = times(HORIZON - pd.Timedelta(days=DAYS), HORIZON, 15)
    ids = [f"site-{number:05d}" for number in range(SITES)]
    path = tmp_path / "meters.parquet"
    write(path, ids, starts)
    facts = call(dict.fromkeys(ids, PRESETS["ten_of_ten"]), START, END, HORIZON, 15)
    began, busy = time.perf_counter(), time.process_time()
    reading = Reading(path.name, "offset", NEW_YORK, 15)
    source = GroupedReadings([path], reading, pd.DataFrame(), pd.Series(ids))
    assert source.plain
    result = settle(facts, source)
    seconds, cpu = time.perf_counter() - began, time.process_time() - busy
    began, busy = time.perf_counter(), time.process_time()
    for name, frame in result.frames.items():
        write_parquet(frame, tmp_path / f"{name}.parquet", table("settlement", name))
    written, written_cpu = time.perf_counter() - began, time.process_time() - busy
    peak_gb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    began, busy = time.perf_counter(), time.process_time()
    file = pq.ParquetFile(path)
    plain = pd.concat([grouped(file.read_row_group(at).to_pandas()) for at in range(file.num_row_groups)])
    clock, plain_cpu = time.perf_counter() - began, time.process_time() - busy
    np.testing.assert_allclose(result.sites["delivered_kwh"], plain.reindex(ids), rtol=1e-9)
    assert (result.sites["state"] == "final").all()
    print(
        f"\n{SITES} sites, {SITES * len(starts):,} readings, load {os.getloadavg()[0]:.1f} on {os.cpu_count()} cores\n"
        f"settled: {seconds:.1f} s ({cpu:.1f} s of processor), {peak_gb:.2f} GB with writing\n"
        f"tables written: {written:.1f} s ({written_cpu:.1f} s)\n"
        f"pandas group-by: {clock:.1f} s ({plain_cpu:.1f} s); ratio of processor seconds {cpu / plain_cpu:.2f}"
    )
    assert seconds < SECONDS_PER_SITE * SITES + 3.0
