"""Tests of groups: many small tables at once, with every weighting, strata, pairs and adjustments."""

from __future__ import annotations

from random import Random

from corpus import Case, Table

SPELLS = {
    "case id": "bigint",
    "order": "text",
    "branch": "text",
    "number": "bigint",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "weight": "bigint",
}
GROUPS = ["household", None, "", 'O\'Hara "x" é\\n']
CASED = ["adam", "Zoe", "zoe", "_x", "Älva", "10", "9", None]


def random_spells(tables: int, seed: int, groups: list, fractional: bool = False) -> list[dict]:
    dice = Random(seed)
    rows = []
    for number in range(tables):
        longest, late, apart = dice.choice([0, 3, 15, 200]), dice.random() < 0.4, dice.random() < 0.15
        events = dice.choice([[0, 1], [0, 1, 1], [0], [1]])
        own_groups = dice.sample(groups, dice.randint(1, len(groups)))
        for _ in range(dice.randint(1, 30)):
            group, duration = dice.choice(own_groups), dice.randint(0, longest)
            shift = 300 * own_groups.index(group) if apart and duration else 0
            rows.append(
                {
                    "case id": number,
                    "order": group,
                    "branch": dice.choice(["north", None, ""]),
                    "number": dice.choice([10, 9, -1, None]),
                    "entry": shift + (dice.randint(0, duration) if late and dice.random() < 0.6 else 0),
                    "duration": shift + duration,
                    "event": dice.choice(events),
                    "weight": dice.randint(1, 640) / 64 if fractional else dice.choice([1, 1, 3, 1000]),
                }
            )
    return rows


MANY = random_spells(60, 1966, GROUPS)
EACH = "by='case id', most_groups=4"
CASES = [
    Case(
        "log-rank tests of many small tables",
        {"compared_spells": Table(SPELLS, MANY)},
        [
            f"log_rank_test('compared_spells', 'order', {EACH}, pairs='all')",
            f"log_rank_test('compared_spells', 'order', {EACH}, strata='branch', pairs='reference', reference='household', adjustment='bonferroni')",
            f"log_rank_test('compared_spells', 'order', {EACH}, weighting='gehan', pairs='all', adjustment='benjamini-hochberg', confidence=0.8)",
            f"log_rank_test('compared_spells', 'order', {EACH}, weighting='tarone-ware', strata=['branch', 'number'])",
            f"log_rank_test('compared_spells', 'number', {EACH}, weighting='peto', pairs='reference', reference=9)",
            f"log_rank_test('compared_spells', 'order', {EACH}, weighting='modified-peto', pairs='all', adjustment='none')",
            f"log_rank_test('compared_spells', 'order', {EACH}, weighting='fleming-harrington(1, 0.5)', strata='branch', pairs='all')",
            f"log_rank_test('compared_spells', 'order', {EACH}, weighting='fleming-harrington(0, 1)')",
            "log_rank_test('compared_spells', 'order', by='case id', most_groups=2, pairs='all')",
        ],
    ),
    Case(
        "log-rank tests with fractional weights",
        {
            "compared_parts": Table(
                SPELLS | {"weight": "double"}, random_spells(30, 1977, GROUPS, fractional=True)
            )
        },
        [
            f"log_rank_test('compared_parts', 'order', {EACH}, strata='branch', pairs='all')",
            f"log_rank_test('compared_parts', 'order', {EACH}, weighting='peto')",
        ],
    ),
    Case(
        "log-rank tests of labels in both cases",
        {"compared_labels": Table(SPELLS, random_spells(20, 1972, CASED))},
        ["log_rank_test('compared_labels', 'order', by='case id', most_groups=8, pairs='all')"],
    ),
]
