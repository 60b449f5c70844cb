"""Rules on the proof: the bound from the recorded prices over all recorded quotes, and every figure of proof.json.

The bound is bound.py's; the objective is put together again from the chosen quotes. A bound by the solver cannot be
worked out from the record and is only held against the rest. Shapes: C candidates, E event and T horizon intervals.
"""

from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.audit.case import Case, requested_nodes
from fleet.audit.evidence import utc_naive
from fleet.audit.findings import Findings
from fleet.audit.quotes import PARTS, change_kw, lists, site_of
from fleet.bound import Offers, Prices, Terms, bound_from_prices, steering, worst_node
from sites.units import Floats, Ints

SHORT_KW: Final = 1e-6
"""A request is met to within this."""
FIRM_FACTOR: Final = 1000.0
"""How many times the shortfall price is raised where the stated one would leave kW undelivered that can be had."""
DEAREST_FACTOR: Final = 10.0
LEAST_OVER_SHARE: Final = 0.01
"""Least price of over-delivery above a cap, as a share of the shortfall price."""
STATES: Final = ("proven", "feasible_cut_short")


@dataclass(frozen=True)
class Sum:
    """What the choice comes to, worked out from the chosen quotes."""

    money: float
    steering: float
    shortfall_kw: Floats
    over_kw: Floats
    gross: float
    terms: Terms

    @property
    def shortfall(self) -> float:
        """Money of what is not delivered."""
        return float(self.terms.shortfall_price_per_kw @ self.shortfall_kw)

    @property
    def slack(self) -> float:
        """Money of what is delivered beyond request and allowance."""
        return float(self.terms.over_price_per_kw @ self.over_kw)

    @property
    def objective(self) -> float:
        """Money, steering, shortfall and slack."""
        return self.money + self.steering + self.shortfall + self.slack


def prices(case: Case, found: Findings) -> None:
    """One shed and one over price per event interval at the request's node; import prices at limited nodes only."""
    book, sheet = case.evidence, case.evidence.sheets["prices"]
    frame = sheet.frame
    asked = requested_nodes(case)
    starts = pd.DatetimeIndex(book.clock.starts).tz_localize("UTC")
    own = frame["kind"].isin(("shed", "over"))
    elsewhere = (own & ~frame["node_id"].isin(asked)).to_numpy()
    found.wrong("prices", sheet, "node_id", elsewhere, frame["node_id"].to_numpy(), ", ".join(asked))
    late = np.where(
        own, ~frame["interval_start"].isin(starts[book.event]), ~frame["interval_start"].isin(starts)
    )
    found.wrong(
        "prices",
        sheet,
        "interval_start",
        late.astype(np.bool_),
        utc_naive(frame["interval_start"]),
        "an interval",
    )
    twice = frame.duplicated(["kind", "node_id", "interval_start"], keep=False).to_numpy()
    found.wrong("prices", sheet, "interval_start", twice, utc_naive(frame["interval_start"]), "each once")
    missing = 2 * len(asked) * (book.event_to - book.event_from) - int(own.sum())
    if missing:
        found.tell(
            "prices", sheet.file, None, f"{int(own.sum())} shed and over prices", "one each an event interval"
        )
    top = {
        kind: _price(case, name)
        for kind, name in (("shed", "shortfall_price_per_kwh"), ("over", "over_price_per_kwh"))
    }
    most = {kind: price * book.clock.step_h for kind, price in top.items()}
    limit: Floats = np.asarray(frame["kind"].map(most).fillna(np.inf), dtype=np.float64)
    found.most("price in its range", sheet, "price", limit)
    found.least("price in its range", sheet, "price", 0.0)
    nodes = book.record.frames["nodes"]
    limited = nodes.loc[nodes["import_limit_kw"].notna(), "node_id"].unique()
    free = ((frame["kind"] == "import") & ~frame["node_id"].isin(limited)).to_numpy()
    found.wrong(
        "price in its range", sheet, "price", free, sheet.numbers("price"), "0 where there is no limit"
    )


def price_settings(case: Case, found: Findings) -> None:
    """Shortfall and over-delivery prices of the proof are the settings', or follow from the horizon's tariffs."""
    book = case.evidence
    dearest = float(case.price_per_kwh.max())
    short = book.settings.get("shortfall_price_per_kwh")
    short = DEAREST_FACTOR * max(dearest, 0.0) if short is None else float(short)
    told = _price(case, "shortfall_price_per_kwh")
    raised = bool(np.isclose(told, FIRM_FACTOR * short, rtol=1e-9))
    found.value(
        "prices of the proof",
        _file(case),
        "shortfall_price_per_kwh",
        told,
        FIRM_FACTOR * short if raised else short,
    )
    over = book.settings.get("over_delivery_price_per_kwh")
    over = max(dearest, 0.0) if over is None else float(over)
    if book.record.proof.get("over_cap_kw") is not None:
        over = FIRM_FACTOR * max(over, LEAST_OVER_SHARE * short)
    found.value(
        "prices of the proof",
        _file(case),
        "over_price_per_kwh",
        book.record.proof["over_price_per_kwh"],
        over,
    )
    fraction = book.settings["over_delivery_fraction"]
    told_fraction = book.record.proof["over_delivery_fraction"]
    found.value("prices of the proof", _file(case), "over_delivery_fraction", told_fraction, fraction)


def bound(case: Case, found: Findings) -> None:
    """The bound from prices.parquet over every recorded quote equals bound_prices."""
    offers, terms = _offers(case), _terms(case, _offers(case))
    value = bound_from_prices(offers, terms, _prices(case)).value
    size = float(np.abs(offers.cost).sum() + terms.shortfall_price_per_kw @ terms.request_kw)
    found.value(
        "bound from prices",
        _file(case),
        "bound_prices",
        case.evidence.record.proof["bound_prices"],
        value,
        size,
    )


def figures(case: Case, found: Findings) -> None:
    """Money, steering, shortfall, slack and objective from the chosen quotes; bound, gap and status from them."""
    told, total = case.evidence.record.proof, _sum(case)
    size = float(np.abs(_quote_numbers(case, "net_cost")).max(initial=0.0)) + total.shortfall

    def check(name: str, expected: Any) -> None:
        found.value("figures of the proof", _file(case), name, told[name], expected, size)

    check("money", total.money)
    check("steering", total.steering)
    check("shortfall", total.shortfall)
    check("slack", total.slack)
    check("objective", total.objective)
    check("gross_cost", total.gross)
    check("shortfall_kwh", float(total.shortfall_kw.sum()) * case.evidence.clock.step_h)
    solver = told["bound_solver"]
    best = told["bound_prices"] if solver is None else max(told["bound_prices"], solver)
    limit = told["objective"] + 1e-6 * (1.0 + told["gross_cost"])
    if best > limit:
        found.tell("bound below the objective", _file(case), "bound", f"{best:.9g}", f"at most {limit:.9g}")
    check("bound", min(best, told["objective"]))
    check("bound_by", "solver" if solver is not None and solver > told["bound_prices"] else "prices")
    lack = told["objective"] - told["bound"]
    check("gap_money", lack)
    check("gap", lack / told["gross_cost"] if told["gross_cost"] > 0.0 else None)
    if "requested_kwh" in told:
        check("requested_kwh", float(total.terms.request_kw.sum()) * case.evidence.clock.step_h)
    if told["status"] not in STATES:
        found.tell("figures of the proof", _file(case), "status", str(told["status"]), " or ".join(STATES))
    if told["bound_by"] == "solver":
        found.notes.append("the bound is the solver's: it cannot be worked out from the record alone")
    elif solver is not None:
        found.notes.append("bound_solver is beside the point here, and nothing in the record vouches for it")


def wishes(case: Case, found: Findings) -> None:
    """Sites that must be in are called, those that must not are not; steering is none where nothing is wished."""
    told = case.evidence.record.proof
    called = set(case.evidence.site_id[case.evidence.called].tolist())
    for name in told.get("include", ()):
        if name not in called:
            found.tell("wishes", _file(case), "include", f"{name} not called", "a called site")
    for name in told.get("exclude", ()):
        if name in called:
            found.tell("wishes", _file(case), "exclude", f"{name} called", "a site that is not called")
    for wish, weight in (("fewest", "steering_per_call"), ("include", "include_bonus")):
        weighs = told.get(weight, 0.0) != 0.0
        if bool(told.get(wish)) != weighs:
            column = weight if weighs else wish
            found.tell("wishes", _file(case), column, str(told[column]), f"{wish} and {weight}, both or none")


def worst(case: Case, found: Findings) -> None:
    """The node whose part lies furthest above the bound, and its gap, from prices and quotes."""
    told = case.evidence.record.proof
    if "worst_node_gap" not in told:
        return
    offers = _offers(case)
    kept, chosen = _kept(case), _chosen(case)
    parts = np.stack([_quote_numbers(case, f"cost_{part}")[kept][chosen] for part in PARTS])
    node, gap = worst_node(
        offers, _terms(case, offers), _prices(case), chosen, np.maximum(parts, 0.0).sum(axis=0)
    )
    name = None if node < 0 else str(case.tree.node_id[node])
    found.value("worst feeder", _file(case), "worst_node", told["worst_node"], name)
    found.value("worst feeder", _file(case), "worst_node_gap", told["worst_node_gap"], gap if name else None)


def _chosen(case: Case) -> Ints:
    """Indices into the kept quotes of those that windows name."""
    frames, kept = case.evidence.record.frames, _kept(case)
    named = frames["quotes"]["quote_id"].isin(frames["windows"]["quote_id"]).to_numpy()
    return np.flatnonzero(named[kept])


def _steering(case: Case) -> Floats:
    """(N,) steering with the wishes of the proof."""
    told = case.evidence.record.proof
    include = np.array(list(told.get("include", ())), dtype=object)
    per_call, bonus = float(told.get("steering_per_call", 0.0)), float(told.get("include_bonus", 0.0))
    return steering(case.evidence.site_id, per_call, include, bonus)


def horizon(case: Case, found: Findings) -> None:
    """Horizon, step, counts and whether the request is met."""
    book, told = case.evidence, case.evidence.record.proof
    for name, time in (("horizon_start", book.clock.start), ("horizon_end", book.clock.end)):
        there = _moment(told[name])
        wanted = pd.Timestamp(time).tz_localize("UTC").to_pydatetime()
        found.value("horizon", _file(case), name, str(there), str(wanted))
    found.value("horizon", _file(case), "interval_minutes", told["interval_minutes"], book.clock.step_minutes)
    quoted = len(book.record.frames["quotes"])
    found.value("horizon", _file(case), "candidates_quoted", told["candidates_quoted"], quoted)
    if "quoted_unmet_kwh_th" in told:
        unmet = float(book.record.frames["quotes"]["unmet_kwh_th"].sum())
        found.value("horizon", _file(case), "quoted_unmet_kwh_th", told["quoted_unmet_kwh_th"], unmet)
    found.value("horizon", _file(case), "met", told["met"], not bool(_sum(case).shortfall_kw.any()))


def _file(case: Case) -> str:
    return f"{case.evidence.folder}/proof.json"


def _price(case: Case, name: str) -> float:
    return float(case.evidence.record.proof[name])


def _moment(text: str) -> datetime:
    return datetime.fromisoformat(text).astimezone(UTC)


def _quote_numbers(case: Case, name: str) -> Floats:
    return case.evidence.sheets["quotes"].numbers(name)


def _kept(case: Case) -> Ints:
    """Rows of quotes of sites at or below a requested node."""
    inside = np.any([case.tree.sites_below(name) for name in requested_nodes(case)], axis=0)
    return np.flatnonzero(inside[site_of(case)])


def _offers(case: Case) -> Offers:
    """The recorded candidates as offers at the request's node."""
    book, kept = case.evidence, _kept(case)
    site = site_of(case)[kept]
    expected = lists(book.record.frames["quotes"]["expected_kw"], book.event_to - book.event_from)[kept]
    expected = expected * book.fact("delivery_factor", site)[:, None]
    inside = [case.tree.sites_below(name)[site] for name in requested_nodes(case)]
    return Offers(
        site=site,
        site_count=len(book.sites),
        cost=_quote_numbers(case, "net_cost")[kept] + _steering(case)[site],
        kw=np.concatenate([np.where(mask[:, None], expected, 0.0) for mask in inside], axis=1),
        change_kw=change_kw(case)[kept],
        below=case.tree.below,
    )


def _terms(case: Case, offers: Offers) -> Terms:
    """What was asked, its prices, and the room in every node, from request, proof and nodes."""
    book = case.evidence
    asked = book.sheets["request"].numbers("requested_kw")
    count = np.where(asked > 0.0, book.clock.step_h, 0.0)
    other, usual, limit = (book.grid("nodes", name) for name in ("other_kw", "usual_kw", "import_limit_kw"))
    room = np.where(np.isnan(limit), np.inf, limit) - other - usual
    fraction = float(book.record.proof["over_delivery_fraction"])
    cap = book.record.proof.get("over_cap_kw")
    free = np.maximum(fraction * asked, offers.kw.max(axis=0, initial=0.0))
    return Terms(
        request_kw=asked,
        allowance_kw=free if cap is None else np.full(asked.size, float(cap)),
        shortfall_price_per_kw=_price(case, "shortfall_price_per_kwh") * count,
        over_price_per_kw=_price(case, "over_price_per_kwh") * count,
        headroom_kw=np.maximum(room, 0.0),
    )


def _prices(case: Case) -> Prices:
    """prices.parquet as arrays; where there is no row the price is 0."""
    book, sheet = case.evidence, case.evidence.sheets["prices"]
    frame = sheet.frame
    hour, value = book.index(utc_naive(frame["interval_start"])), sheet.numbers("price")
    node = pd.Index(case.tree.node_id).get_indexer(pd.Index(frame["node_id"]))
    event, asked = {}, requested_nodes(case)
    place = pd.Index(asked).get_indexer(pd.Index(frame["node_id"]))
    for kind in ("shed", "over"):
        rows = (frame["kind"] == kind).to_numpy() & (hour >= book.event_from) & (hour < book.event_to)
        rows &= place >= 0
        table = np.zeros((len(asked), book.event_to - book.event_from))
        table[place[rows], hour[rows] - book.event_from] = value[rows]
        event[kind] = table.ravel()
    importing = np.zeros((len(case.tree.node_id), book.clock.count))
    rows = (frame["kind"] == "import").to_numpy() & (node >= 0) & (hour < book.clock.count)
    importing[node[rows], hour[rows]] = value[rows]
    return Prices(event["shed"], event["over"], importing)


def _sum(case: Case) -> Sum:
    """The choice put together from the quotes that the windows name."""
    book, offers = case.evidence, _offers(case)
    terms = _terms(case, offers)
    chosen_ids = book.record.frames["windows"]["quote_id"]
    kept = _kept(case)
    chosen = book.record.frames["quotes"]["quote_id"].isin(chosen_ids).to_numpy()
    given = offers.kw[chosen[kept]].sum(axis=0)
    short = terms.request_kw - given
    parts = np.stack([_quote_numbers(case, f"cost_{part}")[chosen] for part in PARTS])
    short = np.where((short > SHORT_KW) & (terms.request_kw > 0.0), short, 0.0)
    gross = float(np.maximum(parts, 0.0).sum()) + float(terms.shortfall_price_per_kw @ short)
    return Sum(
        money=float(_quote_numbers(case, "net_cost")[chosen].sum()),
        steering=float(_steering(case)[book.called].sum()),
        shortfall_kw=short,
        over_kw=np.where(
            terms.request_kw > 0.0, np.maximum(given - terms.request_kw - terms.allowance_kw, 0.0), 0.0
        ),
        gross=gross,
        terms=terms,
    )


RULES = (prices, price_settings, bound, figures, wishes, worst, horizon)
