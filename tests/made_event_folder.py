"""Writes a fleet folder with a called event of any number of sites and their readings, without running a model.

Thu 2025-07-10, 15:00 to 18:00 in New York, quarter hours; readings are one Parquet file sorted by meter, some meters a
row group. Only the tables that a settlement reads hold more than a row.
"""

from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
from made_record import filled
from made_settlement import NEW_YORK, times, utc

from fleet import records
from fleet.rules import SettlementRule
from fleet.schema import Table, tables
from fleet.settings import Settings
from fleet.tables import empty_frame, stable

START, END, HORIZON = utc("2025-07-10 15:00"), utc("2025-07-10 18:00"), utc("2025-07-12")
STEP = pd.Timedelta(minutes=15)
GROUP = 200
"""Meters a row group."""
EVENT = "e1"


def write_meters(path: Path, ids: list[str], days: int) -> int:
    """A daily shape, a level of each site's own and noise, shed in the event; how many readings."""
    starts = times(HORIZON - pd.Timedelta(days=days), HORIZON, 15)
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
    return len(ids) * len(starts)


def write_event(home: Path, ids: list[str], rule: SettlementRule, **settings: object) -> None:
    """The folder's settings and a call of every site over the whole event, 100 kW committed each."""
    home.mkdir(parents=True, exist_ok=True)
    (home / "fleet.toml").write_text(
        f'name = "Made"\ntimezone = "{NEW_YORK}"\ncurrency = "USD"\n', encoding="utf-8"
    )
    event, horizon = times(START, END, 15), times(START, HORIZON, 15)
    rows = {
        "request": pd.DataFrame(
            {"interval_start": event, "interval_end": event + STEP, "requested_kw": 100.0 * len(ids)}
        ).assign(expected_kw=100.0 * len(ids), direction="shed", purpose="real", node_id="root"),
        "windows": pd.DataFrame(
            {"site_id": ids, "window_start": START, "window_end": END, "delivery_factor": 1.0}
        ),
        "intervals": pd.DataFrame(
            {
                "site_id": np.repeat(ids, len(horizon)),
                "interval_start": np.tile(horizon, len(ids)),
                "committed_kw": np.tile(np.where(horizon < END, 100.0, 0.0), len(ids)),
            }
        ),
    }
    frames = {name: _rows(of, rows.get(name, pd.DataFrame([{}]))) for name, of in tables("call").items()}
    fleet = tables("fleet")
    frozen = {name: empty_frame(fleet[name]) for name in ("meter_map", "plant_days", "weather")}
    frozen["sites"] = _rows(fleet["sites"], pd.DataFrame({"site_id": ids}))
    machine = {"site_id": ids, "chiller_id": "c", "capacity_kw_th": 300.0, "rated_cop": 5.0}
    frozen["chillers"] = _rows(fleet["chillers"], pd.DataFrame(machine))
    holiday = pd.DataFrame({"date": [pd.Timestamp("2025-07-04")], "name": ["Holiday"]})
    frozen["holidays"] = _rows(fleet["holidays"], holiday)
    told = Settings.model_validate(
        {"name": "Made", "timezone": NEW_YORK, "currency": "USD", "capacity_payment_per_kwh": 0.5, **settings}
    )
    frozen_json = {
        "settings": told.model_dump(mode="json"),
        "rules": {
            "rules": {rule.name: rule.model_dump(mode="json")},
            "site": dict.fromkeys(ids, rule.name),
        },
        "calls": {"calls": []},
    }
    records.write_call(home, EVENT, frames, {"status": "proven"}, frozen, frozen_json)


def _rows(of: Table, frame: pd.DataFrame) -> pd.DataFrame:
    """The rows with every column of the table, one filled row's value in each that is not given."""
    whole = filled(of, [{}]).iloc[np.zeros(len(frame), dtype=np.int64)].reset_index(drop=True)
    given = frame.assign(event_id=EVENT) if "event_id" in of.names else frame
    return stable(whole.assign(**{str(name): given[name].to_numpy() for name in given.columns}), of)
