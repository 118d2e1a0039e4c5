"""What was planted in the sample and where, for the tests and for readers."""

from collections import Counter
from dataclasses import asdict
from decimal import Decimal
from itertools import pairwise
from typing import Any

import polars as pl

from tests.sample.assortment import relaunches
from tests.sample.behaviour import Behaviour
from tests.sample.deliveries import Delivery
from tests.sample.market import FEEDS
from tests.sample.masters import Masters
from tests.sample.timeline import MONTHS, SEED

Facts = dict[str, Any]
REFUSED_SHARE = 0.02
TURNOVER_SWING = Decimal("0.5")
OUTLET = {"brindlow": "STORE_NO", "kestrin": "shop"}
CLOSENESS = (
    "## How close an index can come",
    "",
    "Measured by `check.py` when the sample was made: GEKS-Tornqvist over all 36 months on unit values, against",
    "the truth. Per elementary aggregate the last month lies -6.0 to +4.8 % off (mean -1.4), the root mean square over",
    "months is 1.3 to 5.2 % (median 2.7). With parts of the generator switched off, one after the other:",
    "",
    "| sample | last month: mean | standard deviation | root mean square: median |",
    "|---|---|---|---|",
    "| as delivered | -1.36 | 2.85 | 2.66 |",
    "| no promotions | -0.89 | 0.73 | 1.25 |",
    "| nor clearance | -0.50 | 0.83 | 0.78 |",
    "| nor relaunches | -0.28 | 0.81 | 0.66 |",
    "| nor delayed repricing | -0.10 | 0.56 | 0.47 |",
    "",
    "So the spread comes from promotions, in the first month above all; clearance and relaunches pull below the truth.",
)


def facts(files: list[Delivery], seen: dict[str, Behaviour], listed: Masters) -> Facts:
    """Return everything planted, ready for JSON."""
    active = [delivery for delivery in files if delivery.status == "active"]
    return {
        "seed": SEED,
        "refused_active": _refused(active),
        "gates": [*_refused_share(files), *_swings(active), *_missing_outlets(active)],
        "items": {feed: _lives(seen[feed]) for feed in FEEDS},
        "unassigned": {feed: [item.code for item in seen[feed].items if not item.aggregate.code] for feed in FEEDS},
        "unlisted": list(listed.unlisted),
        "misfiled": listed.misfiled,
        "relaunches": [asdict(pair) for feed in FEEDS for pair in relaunches(seen[feed].items)],
        "deliveries": [delivery.record() for delivery in sorted(files, key=lambda entry: entry.path)],
    }


def notes(planted: Facts) -> str:
    """Return the page that tells a reader what was planted."""
    odd = [entry for entry in planted["deliveries"] if entry["status"] != "active"]
    moved = sum(entry["utc_month_differs"] for entry in planted["deliveries"] if entry["status"] == "active")
    returned = sum(entry["returns"] for entry in planted["deliveries"] if entry["status"] == "active")
    lines = [
        "# What was planted in the sample",
        "",
        "Written by `generate.py`; the same facts by file, for tests, are in `planted.json`.",
        "`truth.csv` holds the common trend that every regular price of an elementary aggregate follows, per",
        "unit of content, before noise, promotions and clearance; the first month = 100.",
        "",
        "## Refused rows in active deliveries",
        "",
        "| feed | rule | rows |",
        "|---|---|---|",
        *(
            f"| {feed} | {rule} | {count} |"
            for feed, rules in planted["refused_active"].items()
            for rule, count in rules.items()
        ),
        "",
        "Planted rows break one rule each. The one exception: at Brindlow, which may not send returns, some rows",
        "carry a negative quantity and a negative turnover; they count as `quantity-not-positive`.",
        "At Ombray `NaN` as a cell counts as `non-finite`.",
        "",
        "## Deliveries that are not active",
        "",
        *(f"- {entry['path']}: {entry['status']}" for entry in odd),
        "",
        "Both superseded files are the later version broken off in the middle.",
        "",
        "## Breached gates, each answered in the plan",
        "",
        *(
            f"- {gate['gate']}, {gate['feed']}, {gate['on']}: {gate['value']} (allowed {gate['allowed']})"
            for gate in planted["gates"]
        ),
        "",
        "## Items",
        "",
        "| feed | items | sold at the start | entered later | ended: relaunch | clearance | delisted | promotions |",
        "|---|---|---|---|---|---|---|---|",
        *(
            f"| {feed} | {lives['items']} | {lives['initial']} | {lives['entered']} | {lives['relaunch']} "
            f"| {lives['clearance']} | {lives['delisted']} | {lives['promotions']} |"
            for feed, lives in planted["items"].items()
        ),
        "",
        f"- Relaunches under a new code with less in the pack at the same price: {len(planted['relaunches'])}. The old",
        "  item holds its price for months while the trend rises; the smaller pack stands on the trend. A method that",
        "  matches codes misses this rise, so it ends below the truth.",
        "- Clearance: price factor 0.5 to 0.65 and 0.3 of the usual quantity in the last two to four weeks.",
        f"- Kestrin: {moved} sound lines have a UTC month other than their local month; {returned} lines are returns.",
        f"- Items without an assignment: {', '.join(f'{f} {len(c)}' for f, c in planted['unassigned'].items())};",
        f"  {len(planted['unlisted'])} of Kestrin's are missing from its item master as well.",
        f"- Brindlow items filed under a wrong category, put right by an item row: {len(planted['misfiled'])}.",
        "",
        *CLOSENESS,
    ]
    return "\n".join(lines) + "\n"


def _refused(active: list[Delivery]) -> dict[str, dict[str, int]]:
    totals: dict[str, Counter[str]] = {feed: Counter() for feed in FEEDS}
    for delivery in active:
        totals[delivery.feed].update(delivery.refused)
    return {feed: dict(sorted(counts.items())) for feed, counts in totals.items()}


def _lives(seen: Behaviour) -> dict[str, int]:
    initial = sum(item.first_week == 0 for item in seen.items)
    endings = Counter(item.ending for item in seen.items)
    return {
        "items": len(seen.items),
        "initial": initial,
        "entered": len(seen.items) - initial,
        **{ending: endings[ending] for ending in ("relaunch", "clearance", "delisted")},
        "promotions": seen.promotions,
    }


def _gate(gate: str, feed: str, on: str, value: str, allowed: str) -> dict[str, str]:
    return {"gate": gate, "feed": feed, "on": on, "value": value, "allowed": allowed}


def _refused_share(files: list[Delivery]) -> list[dict[str, str]]:
    return [
        _gate(
            "refused-share",
            delivery.feed,
            delivery.path.rpartition("/")[2],
            f"{delivery.refused_share:.4f}",
            str(REFUSED_SHARE),
        )
        for delivery in files
        if delivery.refused_share > REFUSED_SHARE
    ]


def _swings(active: list[Delivery]) -> list[dict[str, str]]:
    breaches = []
    for feed in FEEDS:
        turnover = {delivery.period: delivery.turnover for delivery in active if delivery.feed == feed}
        for before, month in pairwise(MONTHS):
            swing = abs(turnover[month] / turnover[before] - 1)
            if swing > TURNOVER_SWING:
                breaches.append(_gate("turnover-swing", feed, month, f"{swing:.4f}", str(TURNOVER_SWING)))
    return breaches


def _missing_outlets(active: list[Delivery]) -> list[dict[str, str]]:
    breaches = []
    for feed, column in OUTLET.items():
        present = {
            delivery.period: set(delivery.accepted.select(pl.col(column).cast(pl.String)).to_series())
            for delivery in active
            if delivery.feed == feed
        }
        for before, month in pairwise(MONTHS):
            missing = len(present[before] - present[month])
            if missing:
                breaches.append(_gate("missing-outlets", feed, month, str(missing), "0"))
    return breaches
