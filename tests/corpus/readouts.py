"""Read-outs of the curves of many small random tables, cohorts, hazards by band and simultaneous bands."""

from __future__ import annotations

from datetime import date, timedelta
from random import Random

from corpus import Case, Table
from corpus.curves import COLUMNS, random_spells

BY = "by=['case id', 'order']"


def levels_met_exactly() -> list[dict]:
    """Survival of exactly 3/4, 1/2, 1/4 and 1/10: n at risk fall to m, one group for each way there."""
    ways = [
        (n, m, steps)
        for n in range(2, 41)
        for m in range(1, n)
        if m * 4 in (n, 2 * n, 3 * n) or m * 10 == n
        for steps in (1, 2, 3, 5)
        if steps <= n - m
    ]
    rows = []
    for number, (n, m, steps) in enumerate(ways):
        for step in range(steps):
            lost = (n - m) // steps + (1 if step < (n - m) % steps else 0)
            row = {"order": "met", "case id": number, "entry": 0, "duration": 2 + step, "event": 1}
            rows.append(row | {"weight": lost * 1_000})
        row = {"order": "met", "case id": number, "entry": 0, "duration": 99, "event": 0}
        rows.append(row | {"weight": m * 1_000})
    return rows


def members() -> list[dict]:
    dice = Random(1990)
    rows = []
    for number in range(400):
        start = date(2025, 1, 1) + timedelta(days=dice.randint(0, 450))
        watched = (date(2026, 4, 1) - start).days
        lasted = int(dice.expovariate(1 / 120))
        rows.append(
            {
                "started_at": start if number % 40 else None,
                "order": dice.choice(["household", "individual", None]),
                "entry": 0 if number % 7 else min(lasted, watched, 20),
                "duration": min(lasted, watched),
                "event": int(lasted < watched),
                "weight": 1,
            }
        )
    return rows


CASES = [
    Case(
        "read-outs of many small tables",
        {"many_spells": Table(COLUMNS, random_spells(60, 1982))},
        [
            f"survival_at('many_curves', [0, 1, 3, 7, 15, 100, 500], {BY})",
            f"survival_quantiles('many_curves', 0.25, {BY})",
            f"survival_quantiles('daily_curves', 0.5, {BY})",
            f"restricted_mean('many_curves', [1, 3, 15, 100], {BY})",
            f"restricted_mean('many_curves', 10, {BY}, survived=2, confidence=0.8)",
            f"survival_beyond('many_curves', [0, 2, 15], {BY})",
            f"survival_at('daily_curves', [1, 3, 7, 30], {BY})",
            f"restricted_mean('daily_curves', [3, 12], {BY})",
            f"survival_beyond('daily_curves', 2, {BY}, interval_scale='arcsine')",
            "survival_at('many_curves', 3)",
            f"hazard_by_band('many_spells', {BY}, width=4)",
            "hazard_by_band('many_spells', by='order', width=90, horizon=365, confidence=0.999)",
            f"survival_curve('many_spells', {BY}, simultaneous='hall-wellner', interval_scale='arcsine')",
            f"survival_curve('many_spells', {BY}, simultaneous=true, horizon=12)",
        ],
        {
            "many_curves": f"survival_curve('many_spells', {BY})",
            "daily_curves": (
                f"survival_curve('many_spells', {BY}, grid='every', horizon=20, minimum_at_risk=3)"
            ),
        },
    ),
    Case(
        "quantiles at levels that a curve meets exactly",
        {"products": Table(COLUMNS, levels_met_exactly())},
        [f"survival_quantiles('product_curves', {share}, {BY})" for share in (0.25, 0.5, 0.75, 0.9)],
        {"product_curves": f"survival_curve('products', {BY})"},
    ),
    Case(
        "cohorts by the month they began",
        {
            "members": Table(
                {"started_at": "date", **{name: kind for name, kind in COLUMNS.items() if name != "case id"}},
                members(),
            )
        },
        [
            "cohort_readout('members', 'started_at', [7, 30, 180], period='month')",
            "cohort_readout('members', 'started_at', [0, 90], by='order', period='year', minimum_at_risk=5)",
            "cohort_readout('members', 'order', [30, 365])",
        ],
    ),
]
