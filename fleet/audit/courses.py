"""Rules on what the called sites' plants do in each interval: tables intervals and machines.

Balances, sums over machines and tanks, what a machine may give, and what it draws: worked out again from the
frozen machines and weather. Tanks are tanks.py's, zones zones.py's. Shapes: R called sites, U machines,
T intervals.
"""

import numpy as np

from fleet.audit.case import Case
from fleet.audit.findings import Findings
from sites import chiller
from sites.units import Bools, Floats

TANK_SUMS = ("charge_kw_th", "discharge_kw_th", "loss_kw_th", "inventory_kwh_th", "discharge_limit_kw_th")


def expected_and_committed(case: Case, found: Findings) -> None:
    """expected = sign x (event - usual); committed = max(expected, 0) inside the site's own window, else 0."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    usual, event = book.grid("intervals", "usual_kw"), book.grid("intervals", "event_kw")
    expected = book.sign * (event - usual)
    found.equal("expected kW", sheet, "expected_kw", expected.ravel(), np.maximum(usual, event).ravel())
    committed = np.where(book.inside(), np.maximum(book.grid("intervals", "expected_kw"), 0.0), 0.0)
    found.equal("committed kW", sheet, "committed_kw", committed.ravel())


def cooling_balance(case: Case, found: Findings) -> None:
    """direct + discharge + unmet = cooling load + pull-down; none of them negative."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    names = ("discharge_kw_th", "unmet_kw_th", "cooling_load_kw_th", "pull_down_kw_th")
    discharge, unmet, load, pull_down = (book.grid("intervals", name) for name in names)
    made = (load + pull_down - discharge - unmet).ravel()
    found.equal("cooling balance", sheet, "direct_kw_th", made, load.ravel())
    for name in (
        *names,
        "direct_kw_th",
        "charge_kw_th",
        "loss_kw_th",
        "usual_chiller_kw_th",
        "usual_unmet_kw_th",
    ):
        found.least("not negative", sheet, name, 0.0, load.ravel())
    found.most("unmet within the load", sheet, "unmet_kw_th", load.ravel())


def inventory_step(case: Case, found: Findings) -> None:
    """Each inventory, event and usual, follows from the one before by what goes in and out.

    Usual: the chillers' cooling less what the load took of it went into the tanks.
    """
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    step_h = book.clock.step_h
    standing = book.per_called(book.tanks, case.best_kwh_th[:, None])
    charge, discharge, loss = (book.grid("intervals", name) for name in TANK_SUMS[:3])
    held = book.grid("intervals", "inventory_kwh_th")
    before = np.concatenate([standing, held[:, :-1]], axis=1)
    after = before + (charge - discharge - loss) * step_h
    found.equal("inventory step", sheet, "inventory_kwh_th", after.ravel(), before.ravel())
    usual = book.grid("intervals", "usual_inventory_kwh_th")
    served = book.grid("intervals", "cooling_load_kw_th") - book.grid("intervals", "usual_unmet_kw_th")
    stored = (
        book.grid("intervals", "usual_chiller_kw_th") - served - book.grid("intervals", "usual_loss_kw_th")
    )
    before = np.concatenate([standing, usual[:, :-1]], axis=1)
    found.equal(
        "usual inventory step",
        sheet,
        "usual_inventory_kwh_th",
        (before + stored * step_h).ravel(),
        np.maximum(before, served).ravel(),
    )


def sums_over_units(case: Case, found: Findings) -> None:
    """Columns of intervals are sums over the site's machines and tanks."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    for name in TANK_SUMS:
        total = book.per_called(book.tanks, book.grid("tanks", name))
        found.equal("sum over tanks", sheet, name, total.ravel())
    for name in ("direct_kw_th", "charge_kw_th"):
        total = book.per_called(book.machines, book.grid("machines", name))
        found.equal("sum over machines", sheet, name, total.ravel())


def ordered_limits(case: Case, found: Findings) -> None:
    """Each machine's load limit: 0 for those of chiller_ids in the window, the quote's for the others, 1 outside."""
    book, sheet = case.evidence, case.evidence.sheets["machines"]
    limit = np.where(
        book.inside()[case.machine_row], np.where(case.off, 0.0, case.demand_limit)[:, None], 1.0
    )
    found.equal("load limit", sheet, "load_limit_fraction", limit.ravel())


def machine_capability(case: Case, found: Findings) -> None:
    """A machine gives at most its capability in its mode times its load limit; out of service, nothing."""
    book, sheet = case.evidence, case.evidence.sheets["machines"]
    able, _, ice = _capability(case)
    limit = book.grid("machines", "load_limit_fraction")
    direct, charge = book.grid("machines", "direct_kw_th"), book.grid("machines", "charge_kw_th")
    top = able * limit
    found.most("machine capability", sheet, "direct_kw_th", (top - charge).ravel(), top.ravel())
    for name in ("direct_kw_th", "charge_kw_th"):
        found.least("not negative", sheet, name, 0.0, top.ravel())
    idle = ice & (direct + charge <= 0.0)
    found.wrong(
        "ice making", sheet, "making_ice", idle.ravel(), "true", "false while the machine gives nothing"
    )
    warm = ~ice & case.ice_site[book.machines.site][:, None] & (charge > 0.0)
    found.wrong("ice making", sheet, "making_ice", warm.ravel(), "false", "true while it charges an ice tank")


def machine_power(case: Case, found: Findings) -> None:
    """A machine's power from its own load, mode, weather and curves, with the auxiliaries that stop with it."""
    book, sheet = case.evidence, case.evidence.sheets["machines"]
    able, full, _ = _capability(case)
    load = book.grid("machines", "direct_kw_th") + book.grid("machines", "charge_kw_th")
    kind = case.chillers.kind[case.own_machines]
    aux = case.chillers.dedicated_aux_kw[case.own_machines]
    # Interval by interval a row of one machine: the model wants the machine on the last axis.
    power = chiller.part_load_power_kw(load[..., None], able[..., None], full[..., None], kind[:, None, :])[
        ..., 0
    ]
    power = power + np.where(load > 0.0, aux, 0.0)
    found.equal("machine power", sheet, "power_kw", power.ravel(), full.ravel())


def plant_power(case: Case, found: Findings) -> None:
    """event_kw = machines + shared auxiliaries while the plant cools + the tank pump while a tank is used."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    machines = book.per_called(book.machines, book.grid("machines", "power_kw"))
    through = book.grid("intervals", "charge_kw_th") + book.grid("intervals", "discharge_kw_th")
    load = book.grid("machines", "direct_kw_th") + book.grid("machines", "charge_kw_th")
    working = book.per_called(book.machines, load) + through > 0.0
    shared = np.where(working, book.fact("shared_aux_kw", book.called)[:, None], 0.0)
    pump = np.where(through > 0.0, book.fact("tank_pump_kw", book.called)[:, None], 0.0)
    found.equal("plant power", sheet, "event_kw", (machines + shared + pump).ravel())


def before_the_window(case: Case, found: Findings) -> None:
    """Nothing differs from the usual case before the window starts."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    start, _ = book.window()
    before = np.arange(book.clock.count)[None, :] < start[:, None]
    pairs = {
        "event_kw": book.grid("intervals", "usual_kw"),
        "inventory_kwh_th": book.grid("intervals", "usual_inventory_kwh_th"),
        "unmet_kw_th": book.grid("intervals", "usual_unmet_kw_th"),
        "loss_kw_th": book.grid("intervals", "usual_loss_kw_th"),
    }
    for name, usual in pairs.items():
        expected = np.where(before, usual, book.grid("intervals", name))
        found.equal("as usual before the window", sheet, name, expected.ravel())


def _capability(case: Case) -> tuple[Floats, Floats, Bools]:
    """What each machine could give and draw at full load in its mode, and the mode, (U, T)."""
    flags = case.evidence.sheets["machines"].frame["making_ice"].to_numpy(dtype=np.bool_)
    ice: Bools = flags.reshape(-1, case.evidence.clock.count)
    own = case.own_machines
    able = np.where(ice, case.ice_kw_th[own], case.direct_kw_th[own])
    full = np.where(ice, case.ice_full_kw[own], case.direct_full_kw[own])
    return able, full, ice


RULES = (
    expected_and_committed,
    cooling_balance,
    inventory_step,
    sums_over_units,
    ordered_limits,
    machine_capability,
    machine_power,
    plant_power,
    before_the_window,
)
