"""On a Spark cluster what is shuffled depends on groups and durations, not on the number of spells."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest

GROUPS, DURATIONS, PARTITIONS = 5, 200, 4
SPELLS = f"""
    select
        cast(id % {GROUPS} as string) as plan,
        cast(0 as bigint) as entry,
        ((id div {GROUPS}) * 7919) % {DURATIONS} as duration,
        (id div 3) % 2 as event,
        cast(1 as bigint) as weight
    from range(0, {{rows}}, 1, {PARTITIONS})
"""


@pytest.fixture(autouse=True)
def plain_plans(spark):
    """Plans as they are written, without later adaptation, for a few partitions."""
    settings = {"spark.sql.adaptive.enabled": "false", "spark.sql.shuffle.partitions": str(PARTITIONS)}
    before = {name: spark.session.conf.get(name) for name in settings}
    for name, value in settings.items():
        spark.session.conf.set(name, value)
    yield
    for name, value in before.items():
        spark.session.conf.set(name, value)


def nodes(plan: Any) -> Iterator[Any]:
    yield plan
    children = plan.children()
    for place in range(children.size()):
        yield from nodes(children.apply(place))


def executed(spark, rows: int) -> list[Any]:
    """The nodes of the physical plan of a curve over so many spells, after it has run."""
    spark.session.sql(SPELLS.format(rows=rows)).createOrReplaceTempView("spread_spells")
    curve = spark.session.sql(spark.render("survival_curve('spread_spells', by=['plan'])"))
    assert len(curve.collect()) == GROUPS * DURATIONS
    return list(nodes(curve._jdf.queryExecution().executedPlan()))


def exchanges(plan: list[Any]) -> list[Any]:
    return [node for node in plan if node.nodeName() == "Exchange"]


def shuffled(plan: list[Any]) -> int:
    return sum(node.metrics().apply("shuffleRecordsWritten").value() for node in exchanges(plan))


def test_the_spells_are_read_once_and_aggregated_before_anything_is_shuffled(spark):
    plan = executed(spark, 20_000)
    assert sum(node.nodeName() == "Range" for node in plan) == 1
    for exchange in exchanges(plan):
        below = [node.nodeName() for node in nodes(exchange)]
        assert "HashAggregate" in below, "rows of the spell table itself would be shuffled"


def test_what_is_shuffled_does_not_grow_with_the_spells(spark):
    few, many = (shuffled(executed(spark, rows)) for rows in (20_000, 400_000))
    assert few == many
    assert 0 < few <= len(exchanges(executed(spark, 20_000))) * GROUPS * DURATIONS * PARTITIONS
