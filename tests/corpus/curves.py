"""Survival curves of many small random tables at once (each its own group), and of one large one."""

from __future__ import annotations

from random import Random

from corpus import Case, Table

COLUMNS = {
    "case id": "bigint",
    "order": "text",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "weight": "bigint",
    "PlanName": "text",
}


def random_spells(tables: int, seed: int, fractional: bool = False) -> list[dict]:
    """Small tables with ties, zero durations, late entry, all censored or all events, told apart by "case id"."""
    dice = Random(seed)
    rows = []
    for number in range(tables):
        longest, late = dice.choice([0, 3, 15, 400]), dice.random() < 0.5
        events = dice.choice([[0, 1], [0, 1], [0], [1]])
        for _ in range(dice.randint(1, 25)):
            duration = dice.randint(0, longest)
            rows.append(
                {
                    "case id": number,
                    "order": dice.choice([None, "", "household", 'O\'Hara "x" é\\n', "individual"]),
                    "entry": dice.randint(0, duration) if late and dice.random() < 0.6 else 0,
                    "PlanName": dice.choice(["Ä", "b"]),
                    "duration": duration,
                    "event": dice.choice(events),
                    "weight": dice.randint(1, 640) / 64 if fractional else dice.choice([1, 1, 3, 10**8]),
                }
            )
    return rows


BY = "by=['case id', 'order']"
CASES = [
    Case(
        "curves of many small tables",
        {"many_spells": Table(COLUMNS, random_spells(120, 1958))},
        [
            f"survival_curve('many_spells', {BY})",
            f"survival_curve('many_spells', {BY}, interval_scale='linear', confidence=0.9, horizon=7)",
            f"survival_curve('many_spells', {BY}, interval_scale='log', grid='every', horizon=20)",
            "survival_curve('many_spells', by='order', interval_scale='logit', grid='every')",
            """survival_curve('many_spells', by=['order', '"PlanName"'], horizon=9)""",
            f"survival_curve('many_spells', {BY}, interval_scale='arcsine', minimum_at_risk=3, small_counts='hide')",
            "survival_curve('many_spells')",
        ],
    ),
    Case(
        "curves with fractional weights",
        {"parts": Table(COLUMNS | {"weight": "double"}, random_spells(60, 1926, fractional=True))},
        [f"survival_curve('parts', {BY}, weights='fractional')"],
    ),
    Case(
        "spells without an entry or a duration",
        {
            "incomplete": Table(
                {
                    "plan": "text",
                    "entry": "bigint",
                    "duration": "bigint",
                    "event": "bigint",
                    "weight": "bigint",
                },
                [
                    dict(zip(("plan", "entry", "duration", "event", "weight"), row, strict=True))
                    for row in [
                        ("both", 0, None, 1, 2),
                        ("both", None, 4, 1, 3),
                        ("both", 1, None, 0, 5),
                        ("some", 0, None, 1, 2),
                        ("some", None, 9, 0, 1),
                        ("some", 0, 3, 1, 1),
                        ("some", 2, 9, 0, 4),
                    ]
                ],
            )
        },
        [
            "survival_curve('incomplete', by='plan')",
            "survival_curve('incomplete', by='plan', horizon=5)",
            "survival_curve('incomplete', by='plan', horizon=1)",
        ],
        is_sound=False,
    ),
    Case(
        "no spells",
        {"nothing": Table(COLUMNS, [])},
        ["survival_curve('nothing')", f"survival_curve('nothing', {BY})"],
        may_be_empty=True,
    ),
]
