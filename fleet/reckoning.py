"""One site's whole settlement, line by line, from the record alone: days, average, adjustment, intervals, money.

Owns what is shown and in which order; every figure is one of the record's or a sum of them, so that whoever has
the record can do it again by hand. The settlement itself is settle.py's, its check audit.py's.
"""

import json
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet import records
from fleet.errors import FleetError
from fleet.money import told
from fleet.records import CallRecord, SettlementRecord
from fleet.rules import SettlementRule

MONEY: Final = ("capacity_payment", "energy_payment", "penalty", "total")
OF_DAYS: Final = ("like_days", "event_days", "regression", "base_load")


@dataclass(frozen=True)
class _Site:
    """The rows of one site in a settlement, its frozen rule and settings."""

    call: CallRecord
    record: SettlementRecord
    site_id: str

    def rows(self, name: str) -> pd.DataFrame:
        """The site's rows of a table of the settlement, in their order."""
        frame = self.record.frames[name]
        return frame[frame["site_id"] == self.site_id].reset_index(drop=True)

    @property
    def row(self) -> dict[str, Any]:
        """The site's one row of `sites`."""
        return {str(name): _plain(value) for name, value in self.rows("sites").iloc[0].items()}

    @property
    def rule(self) -> SettlementRule:
        """The rule frozen with the call, whatever the fleet's settings say today."""
        frozen = self.call.frozen_json["rules"]
        return SettlementRule.model_validate(frozen["rules"][frozen["site"][self.site_id]])

    @property
    def settings(self) -> dict[str, Any]:
        """The fleet's settings frozen with the call."""
        return dict(self.call.frozen_json["settings"])

    @property
    def step_minutes(self) -> int:
        """Length of an interval, in minutes."""
        return int(self.settings["interval_minutes"])


def reckon(home: Path, event_id: str, site_id: str, revision: int | None = None) -> dict[str, Any]:
    """The reckoning of a site as one document, the newest settlement unless a revision is named.

    Keys: event_id, revision, site_id, rule, source, order_of_rounding, site, days, slots, adjustment, intervals,
    hours, energy, money. FleetError where event, revision or site is not in the record.
    """
    record = records.read_settlement(home, event_id, revision)
    call_revision = None
    if "inputs.json" in record.statements:
        call_revision = int(json.loads(record.statements["inputs.json"])["call_revision"])
    call = records.read_call(home, event_id, call_revision, only=("request", "windows"))
    known = record.frames["sites"]["site_id"].tolist()
    if site_id not in known:
        raise FleetError(
            f"event {event_id}, settlement revision {record.revision}: site {site_id!r} is not called; called are "
            f"{', '.join(known[:8])}{' and more' if len(known) > 8 else ''}"
        )
    site = _Site(call, record, site_id)
    rule = site.rule
    return {
        "event_id": event_id,
        "revision": record.revision,
        "site_id": site_id,
        "currency": site.settings["currency"],
        "timezone": site.settings["timezone"],
        "rule": rule.model_dump(mode="json"),
        "source": rule.source,
        "order_of_rounding": rule.order_of_rounding,
        "site": site.row,
        "days": _days(site),
        "slots": _slots(site),
        "adjustment": _adjustment(site),
        "intervals": _intervals(site),
        "hours": _hours(site),
        "energy": _energy(site),
        "money": _money(site),
    }


def _plain(value: Any) -> Any:
    """A cell for JSON: nothing as None, money and times as text."""
    if value is None or value is pd.NA or value is pd.NaT or (isinstance(value, float) and np.isnan(value)):
        return None
    if isinstance(value, (bool, np.bool_)):
        return bool(value)
    if isinstance(value, (int, np.integer)):
        return int(value)
    return float(value) if isinstance(value, (float, np.floating)) else str(value)


def _records(frame: pd.DataFrame) -> list[dict[str, Any]]:
    return [
        {str(name): _plain(value) for name, value in row.items()}
        for row in frame.astype(object).to_dict("records")
    ]


def _days(site: _Site) -> list[dict[str, Any]]:
    """Every day considered, most recent first."""
    frame = site.rows("days").sort_values("day", ascending=False)
    names = ["day", "used", "reason", "mode", "rank_value", "window_base_kw", "window_charging_kw"]
    shown = frame[[*names, "peak_dry_bulb_c"]].assign(day=frame["day"].dt.strftime("%Y-%m-%d"))
    return _records(shown)


def _local_slots(site: _Site, times: pd.DatetimeIndex) -> list[int]:
    """Slots of local wall time, each once, in order of time."""
    local = times.tz_convert(site.settings["timezone"])
    found = (local.hour * 60 + local.minute) // site.step_minutes
    return list(dict.fromkeys(int(slot) for slot in found))


def _windows(site: _Site) -> dict[str, pd.DatetimeIndex]:
    """Times of the event and of the adjustment window (or those before and after it)."""
    request, rule = site.call.frames["request"], site.rule
    start, end = request["interval_start"].min(), request["interval_end"].max()
    step = f"{site.step_minutes}min"

    def between(since: pd.Timestamp, until: pd.Timestamp) -> pd.DatetimeIndex:
        return pd.date_range(since, until, freq=step, inclusive="left")

    def hours(number: float) -> pd.Timedelta:
        return pd.Timedelta(hours=number)

    first = between(start - hours(rule.adjustment_from_h), start - hours(rule.adjustment_to_h))
    before_end, after = start - hours(rule.before_buffer_h), end + hours(rule.after_buffer_h)
    return {
        "event": between(start, end),
        "window": first,
        "before": between(before_end - hours(rule.before_h), before_end),
        "after": between(after, after + hours(rule.after_h)),
    }


def _slots(site: _Site) -> list[dict[str, Any]]:
    """Slot by slot what the used days read and their mean; the windows' readings for before / after."""
    days = site.rows("days")
    used = set(days.loc[days["used"], "day"])
    method = site.row["method"]
    windows = _windows(site)
    names = ["window", "event"] if method in OF_DAYS else ["before", "after"]
    names = [name for name in names if name != "window" or site.rule.adjustment != "none"]
    if method == "before_after":
        used = {days["day"].max()}
    readings = site.rows("day_intervals")
    readings = readings[readings["day"].isin(used)]
    found = []
    for name in names:
        for slot in _local_slots(site, windows[name]):
            own = readings[readings["slot"] == slot].sort_values("day", ascending=False)
            measured = own["quality"].isin(("measured", "edited")) & own["kw"].notna()
            kw = {
                f"{day:%Y-%m-%d}": _plain(value) for day, value in zip(own["day"], own["kw"].where(measured))
            }
            held = [value for value in kw.values() if value is not None]
            minutes = slot * site.step_minutes
            found.append(
                {
                    "part": name,
                    "local_time": f"{minutes // 60:02d}:{minutes % 60:02d}",
                    "kw_by_day": kw,
                    "mean_kw": sum(held) / len(held) if held else None,
                }
            )
    return found


def _adjustment(site: _Site) -> dict[str, Any]:
    """The window's means, the factor before and after its cap, and with charging left in."""
    row, rule = site.row, site.rule
    days = site.rows("days")
    own = days[days["reason"] == "event_day"].iloc[0]
    used = days[days["used"]]
    cap = rule.cap_fraction
    low = None if cap is None else 1.0 - cap if rule.cap_form == "difference" else 1.0 / (1.0 + cap)
    charging = used["window_charging_kw"].dropna()
    return {
        "kind": row["adjustment_kind"],
        "from_h": rule.adjustment_from_h,
        "to_h": rule.adjustment_to_h,
        "event_day_window_kw": _plain(own["window_base_kw"]),
        "used_days_window_kw": _plain(used["window_base_kw"].mean()) if len(used) else None,
        "guard": row["guard"],
        "event_day_charging_kw": _plain(own["window_charging_kw"]),
        "used_days_charging_kw": _plain(charging.mean()) if len(charging) else None,
        "raw": row["adjustment_raw"],
        "cap": None if cap is None else [low, 1.0 + cap],
        "cap_fraction": cap,
        "applied": row["adjustment"],
        "with_charging": row["adjustment_charged"],
    }


def _intervals(site: _Site) -> list[dict[str, Any]]:
    """Every interval of the event and the own window."""
    frame = site.rows("intervals")
    frame = frame[frame["in_event"] | frame["in_window"]]
    local = frame["interval_start"].dt.tz_convert(site.settings["timezone"])
    names = [
        "baseline_kw",
        "adjusted_baseline_kw",
        "metered_kw",
        "delivered_kw",
        "committed_kw",
        "quality",
        "in_window",
    ]
    return _records(frame[names].assign(local_time=local.map(lambda at: at.isoformat())))


def _hours(site: _Site) -> list[dict[str, Any]]:
    """Each hour of the own window, counted from the event's start: kWh committed, delivered, and what counts.

    An interval with no value adds nothing. counted_kwh is delivered_kwh within the rule's floor and cap where it
    looks at hours, else the same.
    """
    frame, rule = site.rows("intervals"), site.rule
    frame = frame[frame["in_window"]]
    start = site.call.frames["request"]["interval_start"].min()
    number = (frame["interval_start"] - start) // pd.Timedelta(hours=1)
    energy = frame[["committed_kw", "delivered_kw"]].groupby(number).sum() * site.step_minutes / 60.0
    counted = energy["delivered_kw"]
    if rule.performance_by == "hour":
        counted = counted.clip(lower=0.0) if rule.floor_intervals else counted
        counted = counted.clip(upper=energy["committed_kw"]) if rule.cap_intervals else counted
    named = {"committed_kw": "committed_kwh", "delivered_kw": "delivered_kwh"}
    shown = energy.rename(columns=named).assign(counted_kwh=counted)
    return _records(shown.assign(hour=[int(at) + 1 for at in shown.index]))


def _energy(site: _Site) -> dict[str, Any]:
    row = site.row
    names = (
        "committed_kwh",
        "delivered_kwh",
        "performance_factor",
        "paid_share",
        "recovery_until_midnight_kwh",
        "recovery_until_full_kwh",
        "netted_kwh",
        "beyond_training_k",
    )
    return {name: row[name] for name in names}


def _money(site: _Site) -> dict[str, Any]:
    """The lines, the frozen prices they come from, and what this revision posts."""
    row, settings = site.row, site.settings
    posted = site.rows("postings")
    prices = {
        name: settings[name]
        for name in ("capacity_payment_per_kwh", "energy_payment_per_kwh", "penalty_per_kwh")
    }
    return {
        **prices,
        **{name: told(Decimal(row[name]), str(settings["currency"])) for name in MONEY},
        "posted": told(posted["amount"].iloc[0], str(settings["currency"])) if len(posted) else None,
        "from_revision": _plain(posted["from_revision"].iloc[0]) if len(posted) else None,
    }
