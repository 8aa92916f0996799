"""The demo, the reference data and the consumer repo, built and tested on every engine: the same tables."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from harness import ROOT, Engine, KeptDuckDB, Rows
from likeness import differences

EVERYTHING = ["build", "--vars", "{spellcurve_demo: true, spellcurve_reference: true}"]


@pytest.fixture(scope="module")
def kept(tmp_path_factory) -> Engine:
    return KeptDuckDB(tmp_path_factory.mktemp("kept"))


def tables(engine: Engine, outcome) -> dict[str, Rows]:
    """Rows of every table and view that a dbt run left, by model."""
    built = [r.node for r in outcome.result if r.node.resource_type in ("model", "seed")]
    return {node.name: engine.query(f"select * from {node.relation_name}") for node in built}


def build(engine: Engine, arguments: list[str], project: Path = ROOT) -> dict[str, Rows]:
    outcome, said = engine.dbt(arguments, project)
    bad = [f"{r.node.name}: {r.message}" for r in outcome.result or [] if r.status not in ("success", "pass")]
    assert outcome.success and not bad, "\n".join(bad or said[-5:])
    return tables(engine, outcome)


@pytest.fixture(scope="module")
def right(kept) -> dict[str, Rows]:
    return build(kept, EVERYTHING)


def unlike_tables(given: dict[str, Rows], right: dict[str, Rows]) -> list[str]:
    assert set(given) == set(right)
    return [line for name in right for line in differences(name, right[name], given[name])]


def test_demo_and_reference_are_the_same_everywhere(other_engine, right):
    found = unlike_tables(build(other_engine, EVERYTHING), right)
    assert not found, "\n".join(found[:20])


MORE = {
    "models/more/sources.yml": """
sources:
  - name: desk
    schema: "{{ target.schema }}"
    tables: [{name: memberships}]
""",
    "models/more/kept_spells.sql": """
{{ config(materialized='incremental') }}
select subject_id, spell_number, started_at, last_seen_at, entry, duration, event, cause, weight, plan
from ({{ spellcurve.spells_from_intervals(
    source('desk', 'memberships'), 'member_id', 'joined_on', 'left_on', cause='left_because',
    as_of='2024-06-30', carry='plan'
) }}) as found
{% if is_incremental() %}where subject_id is null{% endif %}
""",
    "models/more/curve_elsewhere.sql": """
{{ config(materialized='table', schema='elsewhere') }}
{{ spellcurve.survival_curve(ref('kept_spells'), by='plan', grid='every', horizon=40) }}
""",
    "models/more/curve_of_elsewhere.sql": """
{{ config(materialized='view') }}
with lasting as (select entry, duration, event, weight from {{ ref('kept_spells') }} where duration > 30)
select duration, at_risk, survival from ({{ spellcurve.survival_curve('lasting') }}) as curve
""",
}
# Spark's users need this for seeds with empty cells (docs/warehouses.md); elsewhere it changes nothing.
DISPATCH = (
    "\ndispatch:\n  - macro_namespace: dbt\n    search_order: [harrow_lane_analytics, spellcurve, dbt]\n"
)


@pytest.fixture(scope="module")
def consumer(tmp_path_factory) -> Path:
    """A copy of the consumer repo, with models of more kinds, that depends on this working tree."""
    project = tmp_path_factory.mktemp("consumer") / "repo"
    shutil.copytree(
        ROOT / "tests" / "consumer", project, ignore=shutil.ignore_patterns("dbt_packages", "target")
    )
    (project / "packages.yml").write_text(f"packages:\n  - local: {ROOT}\n")
    with (project / "dbt_project.yml").open("a") as file:
        file.write(DISPATCH)
    for name, text in MORE.items():
        (project / name).parent.mkdir(exist_ok=True)
        (project / name).write_text(text)
    return project


def test_the_consumer_repo_builds_alike_everywhere(other_engine, kept, consumer):
    answers = []
    for engine in (kept, other_engine):
        profiles = (engine.scratch / "profiles.yml").read_text()
        (engine.scratch / "profiles.yml").write_text(profiles.replace('{"spellcurve":', '{"harrow_lane":', 1))
        try:
            outcome, said = engine.dbt(["deps"], consumer)
            assert outcome.success, said[-5:]
            build(engine, ["build", "--exclude", "path:models/more"], consumer)
            answers += [build(engine, ["build"], consumer), build(engine, ["build"], consumer)]
        finally:
            (engine.scratch / "profiles.yml").write_text(profiles)
    first, again, other_first, other_again = answers
    found = unlike_tables(other_first, first) + unlike_tables(other_again, again)
    assert not found, "\n".join(found[:20])
    assert first["kept_spells"] and len(again["kept_spells"]) == len(first["kept_spells"])
