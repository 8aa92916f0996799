"""Differences, trends, times and shifts: many small random tables at once, with group values of every kind."""

from __future__ import annotations

from datetime import date, timedelta
from random import Random

from corpus import Case, Table

COLUMNS = {
    "case id": "bigint",
    "order": "text",
    "branch": "text",
    "stage": "bigint",
    "started_at": "date",
    "last_seen_at": "date",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "weight": "bigint",
}
GROUPS = [None, "", "household", 'O\'Hara "x" é\\n']
START = date(2025, 1, 1)


def random_spells(tables: int, seed: int) -> list[dict]:
    dice = Random(seed)
    rows = []
    for number in range(tables):
        longest, late = dice.choice([0, 3, 15, 200]), dice.random() < 0.4
        events, heaviest = dice.choice([[0, 1], [0, 1, 1], [0], [1]]), dice.choice([1, 1, 10**5])
        for _ in range(dice.randint(1, 25)):
            duration = dice.randint(0, longest)
            started = START + timedelta(days=dice.randint(0, 365))
            rows.append(
                {
                    "case id": number,
                    "order": dice.choice(GROUPS),
                    "branch": dice.choice(["north", None]),
                    "stage": dice.choice([-2, 0, 7, 2025]),
                    "started_at": started,
                    "last_seen_at": started + timedelta(days=duration),
                    "entry": dice.randint(0, duration) if late and dice.random() < 0.6 else 0,
                    "duration": duration,
                    "event": dice.choice(events),
                    "weight": dice.choice([1, 1, 3, heaviest]),
                }
            )
    return rows


MANY = random_spells(50, 1975)
BY = "by='case id'"
SCORES = "{'': 0, 'household': 1.5, none: -2, 'O\\'Hara \"x\" é\\\\n': 4}"
CASES = [
    Case(
        "differences between groups of many small tables",
        {"compared_spells": Table(COLUMNS, MANY)},
        [
            f"difference_at('compared_curves', 'order', [0, 2, 9, 100], 'household', {BY})",
            f"difference_at('compared_curves', 'order', [2, 9], '', {BY}, test_scale='log-log', confidence=0.8)",
            f"difference_at('compared_curves', 'order', [2, 9], '', {BY}, test_scale='arcsine')",
            f"difference_at('compared_curves', 'order', 5, 'household', {BY}, test_scale='logit')",
            f"difference_in_restricted_mean('compared_curves', 'order', [1, 3, 12], 'household', {BY})",
            "difference_in_restricted_mean('daily_compared_curves', 'stage', [2, 100], reference=7)",
        ],
        {
            "compared_curves": "survival_curve('compared_spells', by=['case id', 'order'])",
            "daily_compared_curves": "survival_curve('compared_spells', by='stage', grid='every', horizon=150)",
        },
    ),
    Case(
        "trends of many small tables",
        {"ordered_spells": Table(COLUMNS, MANY)},
        [
            f"trend_test('ordered_spells', 'stage', {BY})",
            f"trend_test('ordered_spells', 'order', scores={SCORES}, strata='branch', weighting='peto', {BY})",
            "trend_test('ordered_spells', 'stage', scores=[7, 0, -2, 2025], strata=['branch', 'order'])",
            "trend_test('ordered_spells', 'order', scores=['', 'household'])",
        ],
    ),
    Case(
        "how long a comparison takes",
        {"paced_spells": Table(COLUMNS, MANY)},
        [
            "events_needed(0.7, power=0.95, alpha=0.001, allocation=0.25, sides=1)",
            f"time_to_events_needed('paced_spells', 1.6, {BY})",
            "time_to_events_needed('paced_spells', 0.4, by=['order'], unit='month', intake_lasts=2, longest=48)",
            f"time_to_events_needed('paced_spells', 1.6, {BY}, intake=2.5, intake_lasts=70, allocation=0.3)",
        ],
    ),
    Case(
        "shifts of survival",
        {"watched_spells": Table(COLUMNS, MANY), "no_spells": Table(COLUMNS, [])},
        [
            "test_survival_has_not_shifted('watched_spells', '2025-07-01', as_of='2026-07-01', alpha=0.9999999)",
            "test_survival_has_not_shifted('watched_spells', 300, as_of='2026-01-01', compare='cohorts', strata=['order', 'branch'],"
            " baseline=60, alpha=0.9999999, at=150, weighting='gehan')",
            "test_survival_has_not_shifted('watched_spells', '2025-07-01', as_of='2026-07-01', unit='month', baseline='2025-02-01',"
            " alpha=0.9999999, at=2)",
            "test_survival_has_not_shifted('no_spells', '2025-07-01', as_of='2026-07-01')",
        ],
    ),
]
