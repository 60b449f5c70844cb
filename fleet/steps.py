"""Steps: what each called site's operator is told to do, machine by machine and tank by tank.

Owns turning the courses of a call (which machine is off, limited or idle in which interval; when each tank is
charged again) into the rows of table call/steps. How a step reads on the page is orders.py's. The order says
nothing that is not a row here.
"""

from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import FleetError

COLUMNS: Final = ("event_id", "site_id", "unit_id", "at", "action", "detail", "value")
ORDER: Final = (
    "inhibit",
    "demand_limit",
    "off",
    "demand_limit_removed",
    "inhibit_removed",
    "charge_start",
    "charge_to",
    "charge_end",
    "restart",
    "recharge_may_start",
    "full_by",
    "usual_by",
)
"""Order of the actions of one moment: a lag machine is inhibited before the stop that would start it, and a limit
stands before the charge that it limits."""
RUNS_KW_TH: Final = 1e-6
"""A machine or a charge below this stands still: the courses are floats."""
NOT_FULL: Final = "not full within the horizon"
NOT_USUAL: Final = "still above its usual level at the end of the horizon"
UNIT: Final = ["site_id", "chiller_id"]
TANK: Final = ["site_id", "tank_id"]


def steps(
    windows: pd.DataFrame,
    chillers: pd.DataFrame,
    sites: pd.DataFrame,
    machines: pd.DataFrame,
    tanks: pd.DataFrame,
    step_minutes: int,
    direction: str = "shed",
) -> pd.DataFrame:
    """Rows of table call/steps of all called sites, sorted by site, time, action and loading order.

    windows, machines, tanks: tables of the call. chillers, sites: input tables with defaults resolved. Called
    sites are the rows of `windows`. In a site's own window a machine of chiller_ids is `off` from its first
    interval at load limit 0; of the others, one that never runs is told `inhibit`, one that runs under a load
    limit below 1 `demand_limit`; both are removed at window_end. Machines come back from window_end, one every
    restart_gap_minutes, none before its off time plus min_off_minutes, rounded up to the minute:

        t_k = max(t_(k-1) + gap, ready_k),  ready_k = max(window_end, off_k + min_off_k)

    taken in order of ready time, then loading order. Each tank has `recharge_may_start` at its first charged
    interval from window_end, and `full_by` at full_again_at, or at the end of the horizon where that is null.

    Direction absorb: each machine that makes charge in the window has `charge_start` at the first interval it does,
    each tank charged `charge_to` its level at window_end, from window_start, and `charge_end` at window_end; no
    machine is inhibited, and `usual_by` stands in the place of `full_by`.

    Raises FleetError where the tables of the call contradict each other or lack rows of a called site.
    """
    inside = _in_window(windows, chillers, machines)
    off = _off(windows, inside)
    parts = [
        off.assign(
            at=off["off_at"],
            action="off",
            detail="load limit 0 %: stop, keep off until its restart",
            value=np.nan,
        ),
        _restarts(off, sites),
        *_held(inside, direction),
        *_tank_steps(windows, tanks, step_minutes, direction),
    ]
    if direction == "absorb":
        parts += [_charging(inside), *_charged(windows, tanks, step_minutes)]
    return _sorted(parts, windows)


def _in_window(windows: pd.DataFrame, chillers: pd.DataFrame, machines: pd.DataFrame) -> pd.DataFrame:
    """Machine intervals of called sites inside their own window, with what the machine is."""
    window = windows[["site_id", "window_start", "window_end"]]
    facts = chillers[[*UNIT, "loading_order", "min_off_minutes"]]
    rows = machines.merge(window, on="site_id", validate="many_to_one")
    rows = rows[
        (rows["interval_start"] >= rows["window_start"]) & (rows["interval_start"] < rows["window_end"])
    ]
    absent = sorted(set(window["site_id"]) - set(rows["site_id"]))
    if absent:
        raise FleetError(
            f"machines: no rows inside the window of site {', '.join(absent)}; the call is incomplete"
        )
    known = rows.merge(facts, on=UNIT, how="left", validate="many_to_one")
    lost = known["min_off_minutes"].isna()
    if lost.any():
        names = known.loc[lost, UNIT].drop_duplicates().agg(" ".join, axis=1)
        raise FleetError(
            f"chillers: no row with min_off_minutes for {', '.join(names)}; the call is incomplete"
        )
    return known


def _off(windows: pd.DataFrame, inside: pd.DataFrame) -> pd.DataFrame:
    """One row per machine of chiller_ids: off_at, ready_at (back from here on), loading_order."""
    named = windows[["site_id", "chiller_ids", "window_end"]].explode("chiller_ids")
    named = named.rename(columns={"chiller_ids": "chiller_id"}).dropna(subset=["chiller_id"])
    zero = inside[inside["load_limit_fraction"] == 0.0]
    first = zero.groupby(UNIT, as_index=False).agg(
        off_at=("interval_start", "min"),
        loading_order=("loading_order", "first"),
        min_off_minutes=("min_off_minutes", "first"),
    )
    both = named.merge(first, on=UNIT, how="outer", indicator=True)
    odd = both["_merge"] != "both"
    if odd.any():
        names = both.loc[odd, UNIT].agg(" ".join, axis=1)
        raise FleetError(
            f"machines: {', '.join(names)}: off in windows.chiller_ids or at load limit 0 in its course, not both; "
            "the call contradicts itself"
        )
    earliest = both["off_at"] + pd.to_timedelta(both["min_off_minutes"], unit="min")
    both["held"] = earliest > both["window_end"]
    both["ready_at"] = earliest.where(both["held"], both["window_end"])
    return both.rename(columns={"chiller_id": "unit_id"})


def _restarts(off: pd.DataFrame, sites: pd.DataFrame) -> pd.DataFrame:
    """Restart times by the equation of `steps`: t_k - k gap is the running maximum of ready_k - k gap."""
    rows = off.merge(
        sites[["site_id", "restart_gap_minutes"]], on="site_id", how="left", validate="many_to_one"
    )
    rows = rows.sort_values(
        ["site_id", "ready_at", "loading_order", "unit_id"], kind="stable", ignore_index=True
    )
    lost = sorted(set(rows.loc[rows["restart_gap_minutes"].isna(), "site_id"]))
    if lost:
        raise FleetError(
            f"sites: no row with restart_gap_minutes for {', '.join(lost)}; the call is incomplete"
        )
    place = rows.groupby("site_id").cumcount()
    lead = pd.to_timedelta(place * rows["restart_gap_minutes"], unit="min")
    at = (rows["ready_at"] - lead).groupby(rows["site_id"]).cummax() + lead
    minutes = _said(rows["min_off_minutes"], "{:g}")
    held = "after its minimum off time of " + minutes + " min"
    free = "at least " + _said(rows["restart_gap_minutes"], "{:g}") + " min after the machine before it"
    first = pd.Series("first machine back", index=rows.index)
    detail = held.where(rows["held"], first.where(place == 0, free))
    return rows.assign(at=at.dt.ceil("min"), action="restart", detail=detail, value=np.nan)


def _held(inside: pd.DataFrame, direction: str) -> list[pd.DataFrame]:
    """inhibit and demand_limit of the machines that are never off in the window, and their removal; an absorb
    inhibits none."""
    each = inside.groupby(UNIT, as_index=False).agg(
        lowest=("load_limit_fraction", "min"),
        direct=("direct_kw_th", "max"),
        charge=("charge_kw_th", "max"),
        start=("window_start", "first"),
        end=("window_end", "first"),
        loading_order=("loading_order", "first"),
    )
    each = each[each["lowest"] > 0.0].rename(columns={"chiller_id": "unit_id"})
    runs = (each["direct"] > RUNS_KW_TH) | (each["charge"] > RUNS_KW_TH)
    idle, limited = each[~runs & (direction != "absorb")], each[runs & (each["lowest"] < 1.0)]
    percent = _said(100.0 * limited["lowest"], "{:g}")
    return [
        idle.assign(
            at=idle["start"], action="inhibit", detail="lag start inhibited: must not start", value=np.nan
        ),
        idle.assign(
            at=idle["end"],
            action="inhibit_removed",
            detail="may start again by its own staging",
            value=np.nan,
        ),
        limited.assign(
            at=limited["start"],
            action="demand_limit",
            detail="load limit " + percent + " % of full load",
            value=limited["lowest"],
        ),
        limited.assign(
            at=limited["end"], action="demand_limit_removed", detail="load limit 100 %: free again", value=1.0
        ),
    ]


def _charging(inside: pd.DataFrame) -> pd.DataFrame:
    """charge_start of the machines that charge in their window of an absorb, with the most they put into tanks."""
    made = inside[inside["charge_kw_th"] > RUNS_KW_TH]
    each = made.groupby(UNIT, as_index=False).agg(
        at=("interval_start", "min"),
        value=("charge_kw_th", "max"),
        loading_order=("loading_order", "first"),
        ice=("making_ice", "any"),
    )
    how = each["ice"].map({True: "make ice", False: "cool the tank"}).astype(object)
    each["detail"] = how + ": up to " + _said(each["value"], "{:.0f}") + " kW_th into the tank"
    return each.rename(columns={"chiller_id": "unit_id"}).assign(action="charge_start")


def _charged(windows: pd.DataFrame, tanks: pd.DataFrame, step_minutes: int) -> list[pd.DataFrame]:
    """charge_to and charge_end of the tanks that are charged in a window of an absorb; where a site's machines have
    nothing to spare for charging, of all its tanks: they give less than usual."""
    window = windows[["site_id", "window_start", "window_end"]]
    rows = tanks.merge(window, on="site_id", validate="many_to_one").rename(columns={"tank_id": "unit_id"})
    inside = (rows["interval_start"] >= rows["window_start"]) & (rows["interval_start"] < rows["window_end"])
    rows = rows[inside].sort_values("interval_start", kind="stable").assign(loading_order=0)
    last = rows["interval_start"] + pd.Timedelta(minutes=step_minutes) == rows["window_end"]
    filled = rows.groupby(["site_id", "unit_id"])["charge_kw_th"].transform("max") > RUNS_KW_TH
    none = ~filled.groupby(rows["site_id"]).transform("any")
    each = rows[last & (filled | none)]
    level = _said(each["inventory_kwh_th"], "{:.0f}")
    return [
        each.assign(
            at=each["window_start"],
            action="charge_to",
            detail="to " + level + " kWh_th by the end, never past the tank's own full signal",
            value=each["inventory_kwh_th"],
        ),
        each.assign(
            at=each["window_end"],
            action="charge_end",
            detail="back to the usual plan: no charging by this order any more",
            value=np.nan,
        ),
    ]


def _tank_steps(
    windows: pd.DataFrame, tanks: pd.DataFrame, step_minutes: int, direction: str
) -> list[pd.DataFrame]:
    """recharge_may_start and full_by (of an absorb usual_by) of every tank of the called sites."""
    rows = tanks.merge(
        windows[["site_id", "window_end", "full_again_at"]], on="site_id", validate="many_to_one"
    ).rename(columns={"tank_id": "unit_id"})
    rows["end"] = rows["interval_start"] + pd.Timedelta(minutes=step_minutes)
    rows["loading_order"] = 0
    rows["full_again_at"] = rows["full_again_at"].astype("datetime64[us, UTC]")
    charged = rows[(rows["interval_start"] >= rows["window_end"]) & (rows["charge_kw_th"] > RUNS_KW_TH)]
    start = charged.groupby(["site_id", "unit_id"], as_index=False).agg(
        at=("interval_start", "min"), value=("charge_kw_th", "max"), loading_order=("loading_order", "first")
    )
    start["action"] = "recharge_may_start"
    start["detail"] = "at most " + _said(start["value"], "{:.0f}") + " kW_th into the tank"
    horizon_end = rows.groupby(["site_id", "unit_id"])["end"].transform("max")
    full = rows[rows["end"] == rows["full_again_at"].fillna(horizon_end)].copy()
    off_grid = sorted(set(rows["site_id"]) - set(full["site_id"]))
    if off_grid:
        raise FleetError(
            f"windows: full_again_at of site {', '.join(off_grid)} is no interval's end in tanks"
        )
    level = _said(full["inventory_kwh_th"], "{:.0f}") + " kWh_th"
    back = "back at its usual level of " + level
    never = NOT_USUAL if direction == "absorb" else NOT_FULL
    full["detail"] = back.where(full["full_again_at"].notna(), never + "; " + level + " then")
    action = "usual_by" if direction == "absorb" else "full_by"
    return [start, full.assign(at=full["end"], action=action, value=full["inventory_kwh_th"])]


def _said(numbers: pd.Series, form: str) -> pd.Series:
    """Numbers as text; object also where there are none, which `map` alone would leave a number."""
    return numbers.map(form.format).astype(object)


def _sorted(parts: list[pd.DataFrame], windows: pd.DataFrame) -> pd.DataFrame:
    """All rows in order, in the columns and types of table call/steps."""
    keep = ["site_id", "unit_id", "at", "action", "detail", "value", "loading_order"]
    filled = [part[keep] for part in parts if len(part)]
    frame = pd.concat(filled, ignore_index=True) if filled else pd.DataFrame(columns=keep)
    frame["rank"] = frame["action"].map({action: rank for rank, action in enumerate(ORDER)})
    frame = frame.sort_values(["site_id", "at", "rank", "loading_order", "unit_id"], kind="stable")
    frame = frame.merge(windows[["event_id", "site_id"]], on="site_id", how="left")
    frame["at"] = frame["at"].astype("datetime64[us, UTC]")
    frame["value"] = frame["value"].astype("float64")
    return frame[list(COLUMNS)].reset_index(drop=True)
