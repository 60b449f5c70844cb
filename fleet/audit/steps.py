"""Rules on what operators are told: table steps, worked out again from windows, machines and tanks.

One row per unit and action: off, restart, inhibit, demand limit and their removal, recharge and full-by.
"""

from typing import Final

import numpy as np
import pandas as pd

from fleet.audit.case import Case
from fleet.audit.findings import Findings

RUNS_KW_TH: Final = 1e-6
KEYS: Final = ["site_id", "unit_id", "action"]
COLUMNS: Final = [*KEYS, "at", "value"]


def steps(case: Case, found: Findings) -> None:
    """Exactly the steps that follow from the courses, each once, at its time and with its value."""
    sheet = case.evidence.sheets["steps"]
    frame = sheet.frame
    parts = [_machine_steps(case), _restarts(case), _tank_steps(case)]
    if case.absorb:
        parts += [_charge_starts(case), _charged_tanks(case)]
    wanted = pd.concat(parts, ignore_index=True)
    twice = frame.duplicated(KEYS, keep=False).to_numpy()
    found.wrong("steps", sheet, "action", twice, frame["action"].to_numpy(), "each action once a unit")
    target = frame[KEYS].merge(wanted.drop_duplicates(KEYS), on=KEYS, how="left", indicator=True)
    extra = (target["_merge"] == "left_only").to_numpy()
    found.wrong(
        "steps",
        sheet,
        "action",
        extra,
        frame["action"].to_numpy(),
        "no such step: the courses do not ask for it",
    )
    known = ~extra
    at = target["at"].where(known, frame["at"])
    found.same("time of the step", sheet, "at", at.to_numpy())
    value = target["value"].where(known, frame["value"]).to_numpy(dtype=np.float64)
    found.equal("value of the step", sheet, "value", value)
    lost = wanted.merge(frame[KEYS].assign(there=True), on=KEYS, how="left")
    for row in lost[lost["there"].isna()].itertuples(index=False):
        found.tell(
            "steps", sheet.file, None, f"no {row.action} of {row.unit_id} at site {row.site_id}", "one"
        )
    found.looked_at("steps", len(wanted))
    silent = (frame["detail"].fillna("").str.strip() == "").to_numpy()
    found.wrong("steps", sheet, "detail", silent, "nothing", "what to do, in words")


def restart_order(case: Case, found: Findings) -> None:
    """Machines of a site come back at least the restart gap apart, none before window_end or its minimum off time."""
    book, sheet = case.evidence, case.evidence.sheets["steps"]
    frame = sheet.frame.assign(row=np.arange(len(sheet.frame)))
    back = frame[frame["action"] == "restart"].merge(
        book.record.frames["windows"][["site_id", "window_end"]], on="site_id", how="left"
    )
    gap = pd.to_timedelta(
        back["site_id"].map(book.sites.set_index("site_id")["restart_gap_minutes"]).astype(float), unit="min"
    )
    ordered = back.assign(gap=gap).sort_values(["site_id", "at"], kind="stable")
    since = ordered["at"] - ordered.groupby("site_id")["at"].shift(1)
    close = (since < ordered["gap"]) | (ordered["at"] < ordered["window_end"])
    mask = np.zeros(len(frame), dtype=np.bool_)
    mask[ordered.loc[close.fillna(False), "row"].to_numpy()] = True
    found.wrong(
        "restart order",
        sheet,
        "at",
        mask,
        frame["at"].to_numpy(),
        "after the window, the gap after the one before",
    )


def _machine_steps(case: Case) -> pd.DataFrame:
    """Off, inhibit and demand limit of every machine in its site's window, and the removal of the last two."""
    book = case.evidence
    inside = book.inside()[case.machine_row]
    limit = np.where(inside, book.grid("machines", "load_limit_fraction"), np.inf)
    most = [
        np.where(inside, book.grid("machines", name), 0.0).max(axis=1, initial=0.0)
        for name in ("direct_kw_th", "charge_kw_th")
    ]
    runs = (most[0] > RUNS_KW_TH) | (most[1] > RUNS_KW_TH)
    lowest = limit.min(axis=1, initial=np.inf)
    windows = book.record.frames["windows"]
    start, end = (windows[name].to_numpy()[case.machine_row] for name in ("window_start", "window_end"))
    stamps = pd.DatetimeIndex(book.clock.starts).tz_localize("UTC")
    off_at = stamps[np.argmax(limit == 0.0, axis=1)]
    on = lowest > 0.0
    none = np.full(lowest.size, np.nan)
    idle = on & ~runs & (not case.absorb)
    parts = [
        _rows(case, lowest == 0.0, "off", off_at, none),
        _rows(case, idle, "inhibit", start, none),
        _rows(case, idle, "inhibit_removed", end, none),
        _rows(case, on & runs & (lowest < 1.0), "demand_limit", start, lowest),
        _rows(case, on & runs & (lowest < 1.0), "demand_limit_removed", end, np.ones(lowest.size)),
    ]
    return pd.concat(parts, ignore_index=True)


def _rows(case: Case, mask: np.ndarray, action: str, at: object, value: np.ndarray) -> pd.DataFrame:
    """Steps of one action for the machines in `mask`."""
    book = case.evidence
    frame = pd.DataFrame(
        {
            "site_id": book.site_id[book.machines.site],
            "unit_id": book.machines.unit_id,
            "action": action,
            "at": pd.Series(at).astype("datetime64[us, UTC]"),
            "value": value,
        }
    )
    return frame[mask]


def _restarts(case: Case) -> pd.DataFrame:
    """Restart of every machine that was off: t_k = max(t_(k-1) + gap, ready_k), in order of ready time.

    ready_k = max(window_end, off_k + minimum off time); up to the next full minute.
    """
    off = _machine_steps(case)
    off = off[off["action"] == "off"]
    book = case.evidence
    facts = book.machine_facts[["site_id", "chiller_id", "loading_order", "min_off_minutes"]]
    rows = off.merge(facts.rename(columns={"chiller_id": "unit_id"}), on=["site_id", "unit_id"], how="left")
    rows = rows.merge(book.record.frames["windows"][["site_id", "window_end"]], on="site_id", how="left")
    rows = rows.merge(book.sites[["site_id", "restart_gap_minutes"]], on="site_id", how="left")
    rested = rows["at"] + pd.to_timedelta(rows["min_off_minutes"].astype(float), unit="min")
    rows["ready"] = rested.where(rested > rows["window_end"], rows["window_end"])
    rows = rows.sort_values(
        ["site_id", "ready", "loading_order", "unit_id"], kind="stable", ignore_index=True
    )
    place = rows.groupby("site_id").cumcount()
    gap = pd.to_timedelta(rows["restart_gap_minutes"].astype(float), unit="min")
    at = rows["ready"]
    # A loop over the place in the queue: each machine waits for the one before it.
    for turn in range(1, int(place.max()) + 1 if len(rows) else 0):
        waited = at.shift(1) + gap
        at = at.where((place != turn) | (at >= waited), waited)
    return rows.assign(action="restart", at=at.dt.ceil("min"), value=np.nan)[COLUMNS]


def _tank_steps(case: Case) -> pd.DataFrame:
    """First charged interval after the window with its highest rate, and when the tank is back with its level."""
    book = case.evidence
    frame = book.record.frames["tanks"].merge(
        book.record.frames["windows"][["site_id", "window_end", "full_again_at"]], on="site_id", how="left"
    )
    frame = frame.rename(columns={"tank_id": "unit_id"})
    step = pd.Timedelta(minutes=book.clock.step_minutes)
    charged = frame[(frame["interval_start"] >= frame["window_end"]) & (frame["charge_kw_th"] > RUNS_KW_TH)]
    begin = charged.groupby(["site_id", "unit_id"], as_index=False).agg(
        at=("interval_start", "min"), value=("charge_kw_th", "max")
    )
    ends = frame["interval_start"] + step
    last = pd.Timestamp(book.clock.end).tz_localize("UTC")
    back = frame["full_again_at"].astype("datetime64[us, UTC]").fillna(last)
    full = frame[ends == back].assign(at=ends[ends == back], value=lambda rows: rows["inventory_kwh_th"])
    by = "usual_by" if case.absorb else "full_by"
    return pd.concat([begin.assign(action="recharge_may_start"), full.assign(action=by)], ignore_index=True)[
        COLUMNS
    ]


def _charge_starts(case: Case) -> pd.DataFrame:
    """Absorb: the first interval of the window in which a machine charges, with its highest rate there."""
    book = case.evidence
    charge = np.where(book.inside()[case.machine_row], book.grid("machines", "charge_kw_th"), 0.0)
    most = charge.max(axis=1, initial=0.0)
    stamps = pd.DatetimeIndex(book.clock.starts).tz_localize("UTC")
    first = stamps[np.argmax(charge > RUNS_KW_TH, axis=1)]
    return _rows(case, most > RUNS_KW_TH, "charge_start", first, most)


def _charged_tanks(case: Case) -> pd.DataFrame:
    """Absorb: the level each charged tank is brought to by the window's end; all tanks where none is charged."""
    book = case.evidence
    windows = book.record.frames["windows"]
    charge = np.where(book.inside()[case.tank_row], book.grid("tanks", "charge_kw_th"), 0.0)
    filled = charge.max(axis=1, initial=0.0) > RUNS_KW_TH
    some = np.bincount(case.tank_row, filled, book.called.size) > 0
    start, end = (windows[name].to_numpy()[case.tank_row] for name in ("window_start", "window_end"))
    _, last = book.window()
    level = book.grid("tanks", "inventory_kwh_th")[np.arange(filled.size), last[case.tank_row] - 1]
    frame = pd.DataFrame({"site_id": book.site_id[book.tanks.site], "unit_id": book.tanks.unit_id})
    frame = frame.assign(
        start=pd.Series(start).astype("datetime64[us, UTC]"), end=pd.Series(end).astype("datetime64[us, UTC]")
    )
    to = frame.assign(action="charge_to", at=frame["start"], value=level)
    back = frame.assign(action="charge_end", at=frame["end"], value=np.nan)
    named = filled | ~some[case.tank_row]
    both: pd.DataFrame = pd.concat([to[named], back[named]], ignore_index=True)
    return both[COLUMNS]


RULES = (steps, restart_order)
