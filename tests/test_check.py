"""`spellcurve check` on real projects: the corpus on every engine, the consumer repo whole and broken."""

from __future__ import annotations

import json
import re
import shutil
from dataclasses import replace
from datetime import datetime
from pathlib import Path
from xml.etree import ElementTree as xml

import duckdb
import pytest
import spellcurve
from corpus import Case, Table, all_cases
from harness import KeptDuckDB
from proof import write_project
from spellcurve.check import AGREES, DISAGREES, STALE, UNCHECKED, CheckedCall, CheckError, check_project
from spellcurve.cli import app
from spellcurve.project import Project, find_calls
from test_consumer import PACKAGE, Consumer, copied_to
from typer.testing import CliRunner

UNSOUND = "What the model reads is not sound"


# The corpus


def one_call_of_each_macro() -> list[Case]:
    """The corpus cut down to the first call of every macro, with the tables that these need."""
    seen: set[str] = set()
    cases = []
    for case in all_cases():
        calls = []
        for call in case.calls:
            macro = call.split("(")[0]
            if macro not in seen and not macro.startswith("test_"):
                seen.add(macro)
                calls.append(call)
        made = {name: call for name, call in case.made.items() if any(f"'{name}'" in one for one in calls)}
        if calls:
            cases.append(replace(case, calls=calls, made=made))
    return cases


def checked(engine, folder: Path, cases: list[Case]) -> list[CheckedCall]:
    proof = write_project(engine, folder / "project", cases)
    outcome, said = engine.dbt(["run"], proof.folder)
    assert outcome.success, "\n".join(said[-5:])
    found = check_project(proof.folder, profiles_dir=engine.scratch, target=engine.name)
    assert {call.model for call in found.calls} == set(proof.cases)
    wrong = [
        f"{(folder / 'project' / call.path).read_text()}: {call.verdict} {call.note}"
        for call in found.calls
        if not proof.cases[call.model].is_sound and not (call.verdict == UNCHECKED and UNSOUND in call.note)
    ]
    assert not wrong, "\n".join(wrong)
    return [call for call in found.calls if proof.cases[call.model].is_sound]


def assert_agreement(calls: list[CheckedCall]) -> None:
    wrong = [
        f"{c.model} {c.macro}: {c.verdict} {c.note} {c.sentences[:3]}" for c in calls if c.verdict != AGREES
    ]
    assert not wrong, "\n".join(wrong)


def test_every_call_of_the_corpus_is_recomputed_and_agrees(tmp_path_factory, tmp_path):
    calls = checked(KeptDuckDB(tmp_path_factory.mktemp("kept")), tmp_path, all_cases())
    assert_agreement(calls)
    assert sum(call.figures for call in calls) > 100_000


def test_every_macro_is_recomputed_and_agrees_on_the_other_engines(other_engine, tmp_path):
    assert_agreement(checked(other_engine, tmp_path, one_call_of_each_macro()))


UNSOUND_SPELLS = {
    "entryless": {"entry": None},
    "endless": {"duration": None},
    "undecided": {"event": None},
    "weightless": {"weight": None},
    "backward": {"entry": 5},
    "doubled": {"event": 2},
    "negative": {"weight": -9},
    "partial": {"duration": 3.5},
}
READING_SPELLS = [
    "survival_curve('{0}', by='plan')",
    "survival_curve('{0}', horizon=2)",
    "hazard_by_band('{0}', by='plan', width=2)",
    "cohort_readout('{0}', 'plan', [2])",
    "actuarial_table('{0}', by='plan', width=2)",
    "cumulative_incidence('{0}', by='plan')",
    "mean_cumulative_count('{0}', 'happenings', 'subject', 'at', by='plan')",
    "mean_cumulative_count('{0}', 'happenings', 'subject', 'age', happened_as='tenure')",
    "mean_cumulative_count('{0}', 'happenings', 'subject', 'at', rows='faulty')",
    "log_rank_test('{0}', 'plan')",
    "time_to_events_needed('{0}', 1.6, intake=2)",
    "incidence_gray_test('{0}', 'plan', 'moved')",
]
SPELL_COLUMNS = {
    "subject_id": "text",
    "started_at": "moment",
    "last_seen_at": "moment",
    "plan": "text",
    "entry": "bigint",
    "duration": "double",
    "event": "bigint",
    "cause": "text",
    "weight": "double",
}


def test_unsound_spells_are_refused_in_one_sentence_whatever_reads_them(tmp_path_factory, tmp_path):
    people = [("ann", "solo", 1), ("bob", "pair", 0), ("cleo", "solo", 0), ("dan", "pair", 1)]
    spells = [
        (who, datetime(2031, 4, 1), datetime(2031, 4, 5), plan, 0, 4, event, "moved" if event else None, 1)
        for who, plan, event in people
    ]
    good = [dict(zip(SPELL_COLUMNS, row, strict=True)) for row in spells]
    tables = {name: Table(SPELL_COLUMNS, [*good[:3], good[3] | bad]) for name, bad in UNSOUND_SPELLS.items()}
    happenings = Table(
        {"subject": "text", "at": "moment", "age": "bigint"},
        [{"subject": "ann", "at": datetime(2031, 4, 2), "age": 1}],
    )
    calls = [
        call.format(name)
        for name, bad in UNSOUND_SPELLS.items()
        for call in READING_SPELLS
        if "event" not in bad or not call.startswith("mean_cumulative_count")  # which does not read it
    ]
    case = Case("unsound", tables | {"happenings": happenings}, calls, is_sound=False)
    assert checked(KeptDuckDB(tmp_path_factory.mktemp("kept")), tmp_path, [case]) == []


def test_a_refused_spell_is_described(consumer):
    consumer.write(
        "models/spells_of_nobody.sql",
        "select 'solo' as plan, 0 as entry, cast(null as integer) as duration, 1 as event, 2 as weight",
    )
    consumer.write(
        "models/curve_of_nobody.sql", "{{ spellcurve.survival_curve(ref('spells_of_nobody'), by='plan') }}"
    )
    consumer.build("--select", "spells_of_nobody", "curve_of_nobody")
    found = verdicts(consumer, "curve_of_nobody")["curve_of_nobody"]
    assert found.note == (
        f"{UNSOUND}: a spell of entry 0, duration null, event 1, weight 2 in the group solo needs a whole "
        "number as duration; correct it (the test spells_are_sound lists such spells)."
    )


def test_a_hand_made_table_without_a_duration_is_refused(consumer):
    curve = "1 as at_risk, 0 as events, 0 as censored, 0.0 as hazard, 1.0 as survival, null as std_error"
    incidence = "'moved' as cause, 1 as at_risk, 0 as events, 0.0 as incidence, 0.0 as std_error"
    bounds = "null as {0}_lower, null as {0}_upper"
    for name, columns, macro in [
        ("survival", f"{curve}, {bounds.format('survival')}", "survival_at"),
        ("incidence", f"{incidence}, {bounds.format('incidence')}", "incidence_at"),
    ]:
        rows = " union all ".join(f"select {duration} as duration, {columns}" for duration in (0, "null"))
        consumer.write(f"models/own_{name}.sql", rows)
        consumer.write(f"models/{name}_read.sql", f"{{{{ spellcurve.{macro}(ref('own_{name}'), [3]) }}}}")
    consumer.build("--select", "own_survival+", "own_incidence+")
    found = verdicts(consumer, "survival_read", "incidence_read")
    for call in found.values():
        assert call.verdict == UNCHECKED and "has a row without a duration" in call.note, call


# The consumer repo


@pytest.fixture(scope="module")
def built(tmp_path_factory) -> Path:
    """The repo with everything built, to be copied: building it takes longer than checking it."""
    with pytest.MonkeyPatch.context() as monkeypatch:
        made = copied_to(tmp_path_factory.mktemp("built") / "repo", monkeypatch)
        made.build()
        return made.folder


@pytest.fixture
def consumer(built, tmp_path, monkeypatch) -> Consumer:
    shutil.copytree(built, tmp_path / "repo", symlinks=True)
    monkeypatch.setenv("DBT_SEND_ANONYMOUS_USAGE_STATS", "false")
    monkeypatch.setenv("HARROW_LANE_DATABASE", str(tmp_path / "repo" / "harrow_lane.duckdb"))
    return Consumer(tmp_path / "repo")


def check(consumer: Consumer, *options: str) -> tuple[int, str]:
    """Run the command as a user would; returns its exit status and what it printed."""
    place = ["--project-dir", str(consumer.folder), "--profiles-dir", str(consumer.folder)]
    done = CliRunner(env={"COLUMNS": "200"}).invoke(app, ["check", *place, *options])
    return done.exit_code, done.output


def verdicts(consumer: Consumer, *select: str, **options) -> dict[str, CheckedCall]:
    found = check_project(consumer.folder, profiles_dir=consumer.folder, select=select, **options)
    return {call.model: call for call in found.calls}


def execute(consumer: Consumer, sql: str) -> None:
    with duckdb.connect(str(consumer.folder / "harrow_lane.duckdb")) as connection:
        connection.execute(sql)


def test_a_project_whose_figures_are_right_passes(consumer, tmp_path):
    before = table_states(consumer)
    status, said = check(
        consumer, "--junit", str(tmp_path / "a" / "j.xml"), "--json", str(tmp_path / "c.json")
    )
    assert status == 0, said
    assert "7 models on duckdb" in said and "7 agrees" in said
    assert table_states(consumer) == before
    suite = xml.parse(tmp_path / "a" / "j.xml").getroot()
    assert (suite.get("tests"), suite.get("failures"), suite.get("errors")) == ("7", "0", "0")
    content = json.loads((tmp_path / "c.json").read_text())
    assert content["exit_status"] == 0 and {call["verdict"] for call in content["calls"]} == {AGREES}
    by_model = {call["model"]: call for call in content["calls"]}
    assert by_model["membership_curve"]["figures"] > 100
    assert "part of a larger model" in by_model["returning_member_curve"]["note"]


def table_states(consumer: Consumer) -> list[tuple]:
    with duckdb.connect(str(consumer.folder / "harrow_lane.duckdb")) as connection:
        return connection.sql(
            "select table_schema, table_name, table_type from information_schema.tables order by all"
        ).fetchall()


def break_the_curve(consumer: Consumer) -> None:
    """Put a macro of the repo's own in the package's place, with a survival that is 1% too low."""
    source = (PACKAGE / "macros" / "estimates" / "survival_curve.sql").read_text()
    own = source[source.index("{% macro default__survival_curve") :]
    right = "{{ spellcurve._survival_of('log_survival') }} as survival,"
    assert own.count(right) == 1
    own = own.replace(right, "0.99 * (" + right.replace(" as", ") as"))
    consumer.write("macros/survival_curve.sql", own)
    project = (consumer.folder / "dbt_project.yml").read_text()
    order = "search_order: ['harrow_lane_analytics', 'spellcurve']"
    consumer.write("dbt_project.yml", f"{project}\ndispatch:\n  - macro_namespace: spellcurve\n    {order}\n")
    consumer.build("--select", "membership_curve", "--exclude", "resource_type:test")


def test_a_broken_curve_turns_ci_red_with_a_message_that_a_stranger_understands(consumer, tmp_path):
    break_the_curve(consumer)
    status, said = check(consumer, "--select", "membership_curve", "--junit", str(tmp_path / "j.xml"))
    assert status == 1
    assert "membership_curve (models/members/membership_curve.sql): disagrees" in said
    assert re.search(r"survival at plan = \S+, duration 0 is 0\.99, but 1 is expected", said)
    assert "macros of yours that take the place of the package's" in said
    [failure] = xml.parse(tmp_path / "j.xml").getroot().iter("failure")
    assert failure.get("type") == DISAGREES
    assert "things are wrong" in failure.get("message") and "0.99, but 1 is expected" in failure.text


TAMPERED = [
    ("update analytics.membership_curve set at_risk = at_risk + 1 where duration = 0", "at_risk at plan"),
    ("delete from analytics.membership_curve where duration = 0", "is missing from the table"),
    ("insert into analytics.membership_curve from analytics.membership_curve limit 1", "more than once"),
    (
        "update analytics.membership_curve set duration = 99999 where duration = 0",
        "should not be in the table",
    ),
    ("update analytics.membership_curve set survival_lower = null where survival < 1", "is null, but"),
    ("update analytics.membership_curve set std_error = 'nan' where duration = 0", "no finite number"),
    ("alter table analytics.membership_curve drop hazard", "The table has no column hazard"),
]


def test_what_is_wrong_with_a_table_is_named(consumer):
    for sql, sentence in TAMPERED:
        consumer.build("--select", "membership_curve", "--exclude", "resource_type:test")
        execute(consumer, sql)
        found = verdicts(consumer, "membership_curve")["membership_curve"]
        # the model's own SQL would still give the right rows
        assert found.verdict == STALE, sql
        assert any(sentence in one for one in found.sentences), (sentence, found.sentences[:3])


def test_a_curve_that_is_older_than_its_spells_is_called_stale(consumer):
    execute(consumer, "update analytics.membership_spells set duration = duration + 1 where event = 0")
    found = verdicts(consumer, "membership_curve")["membership_curve"]
    assert found.verdict == STALE and "build it again" in found.note


READ_OUTS = {
    "own_shares": "survival_at(ref('membership_curve'), [30, 365], by='plan')",
    "own_medians": "survival_quantiles(ref('membership_curve'), by='plan')",
    "own_conditional": "survival_beyond(ref('membership_curve'), [0, 30], by='plan')",
    "own_means": "restricted_mean(ref('membership_curve'), [90, 365], by='plan')",
    "own_difference": "difference_at(ref('membership_curve'), 'plan', [90, 365], 'household')",
    "own_causes": "cumulative_incidence(ref('membership_spells'), by='plan')",
    "own_causes_at": "incidence_at(ref('own_causes'), [30, 365], by='plan')",
}


def write_read_outs(consumer: Consumer) -> None:
    for name, call in READ_OUTS.items():
        table = "{{ config(materialized='table') }}"
        consumer.write(f"models/more/{name}.sql", f"{table}\n{{{{ spellcurve.{call} }}}}\n")
    consumer.build("--select", *READ_OUTS)


def test_what_was_read_off_a_stale_curve_is_stale(consumer):
    write_read_outs(consumer)
    assert {found.verdict for found in verdicts(consumer, *READ_OUTS).values()} == {AGREES}
    execute(consumer, "update analytics.membership_spells set duration = duration + 1 where event = 1")
    found = verdicts(consumer, *READ_OUTS)
    assert {name: one.verdict for name, one in found.items()} == dict.fromkeys(READ_OUTS, STALE)
    assert "right for membership_curve as that stands, which is stale" in found["own_shares"].note
    assert "right for own_causes as that stands" in found["own_causes_at"].note
    consumer.build("--select", "membership_curve", "own_causes", "--exclude", "resource_type:test")
    found = verdicts(consumer, "own_shares", "own_causes_at")
    assert all(one.verdict == STALE and "its table holds others" in one.note for one in found.values())


def test_read_outs_of_a_table_that_no_call_makes_are_checked_against_it(consumer):
    """Here a copy of a curve; every read-out of one."""
    consumer.write("models/more/copied.sql", "select * from {{ ref('membership_curve') }}\n")
    calls = {
        "copied_shares": "survival_at(ref('copied'), [0, 30, 3650], by='plan')",
        "copied_medians": "survival_quantiles(ref('copied'), [0.9, 0.5], by='plan')",
        "copied_means": "restricted_mean(ref('copied'), [90, 365], by='plan')",
        "copied_beyond": "survival_beyond(ref('copied'), [0, 30, 90], by='plan')",
        "copied_difference": "difference_at(ref('copied'), 'plan', [90, 365], 'household')",
        "copied_means_difference": "difference_in_restricted_mean(ref('copied'), 'plan', 180, 'household')",
    }
    for name, call in calls.items():
        consumer.write(f"models/more/{name}.sql", f"{{{{ spellcurve.{call} }}}}\n")
    consumer.build("--select", "copied", *calls)
    found = verdicts(consumer, *calls)
    assert {name: one.verdict for name, one in found.items()} == dict.fromkeys(calls, AGREES)
    assert all("from the curve as published" in one.note for one in found.values())
    assert all(one.comparisons[0].figures > 5 for one in found.values())


def test_what_was_read_off_a_wrong_curve_disagrees(consumer):
    write_read_outs(consumer)
    break_the_curve(consumer)
    consumer.build("--select", "own_shares", "--exclude", "resource_type:test")
    found = verdicts(consumer, "membership_curve", "own_shares")
    assert {one.verdict for one in found.values()} == {DISAGREES}


def test_spells_as_of_another_day_are_called_stale(consumer):
    model = consumer.folder / "models" / "members" / "membership_spells.sql"
    model.write_text(model.read_text().replace("as_of='2024-07-01'", "as_of='2024-06-20'"))
    found = verdicts(consumer, "membership_spells")["membership_spells"]
    assert found.verdict == STALE
    assert "last seen at 2024-06-17" in found.note and "would be at 2024-06-06" in found.note


def test_wrong_spells_are_named(consumer):
    model = consumer.folder / "models" / "members" / "membership_spells.sql"
    model.write_text(
        "{{ config(post_hook='update {{ this }} set entry = entry + 1 where entry > 0') }}\n"
        + model.read_text()
    )
    consumer.build("--select", "membership_spells", "--exclude", "resource_type:test")
    found = verdicts(consumer, "membership_spells")["membership_spells"]
    assert found.verdict == STALE
    assert any(sentence.startswith("entry of the spell with subject_id") for sentence in found.sentences)


def test_models_of_every_form_are_checked(consumer):
    """Ephemeral spells, a macro of the repo's own around the package's, quoted columns, two calls in one."""
    consumer.write(
        "macros/own.sql",
        "{% macro own_curve(spells) %}{{ spellcurve.survival_curve(spells, by='\"Plan\"') }}{% endmacro %}",
    )
    consumer.write(
        "models/more/loose_spells.sql",
        "{{ config(materialized='ephemeral') }}\n"
        "{{ spellcurve.spells_from_intervals(ref('stg_memberships'), 'member_id', 'joined_on', 'left_on',"
        " as_of='2024-07-01', carry=['plan']) }}",
    )
    consumer.write(
        "models/more/renamed_spells.sql",
        '{{ config(materialized="view") }}\n'
        'select plan as "Plan", entry, duration, event, weight from {{ ref("loose_spells") }}',
    )
    consumer.write("models/more/own_curve.sql", "{{ own_curve(ref('renamed_spells')) }}")
    consumer.write("models/more/loose_curve.sql", "{{ spellcurve.survival_curve(ref('loose_spells')) }}")
    consumer.write(
        "models/more/both.sql",
        "with old as ({{ spellcurve.survival_curve(ref('membership_spells'), horizon=30) }}),\n"
        "shares as ({{ spellcurve.survival_at('old', [7, 30]) }})\n"
        "select * from shares",
    )
    consumer.build("--select", "path:models/more")
    found = check_project(consumer.folder, profiles_dir=consumer.folder, select=["path:models/more"])
    assert [(c.model, c.verdict, c.note) for c in found.calls if c.verdict != AGREES] == []
    assert sorted((call.model, call.macro) for call in found.calls) == [
        ("both", "survival_at"),
        ("both", "survival_curve"),
        ("loose_curve", "survival_curve"),
        ("loose_spells", "spells_from_intervals"),
        ("own_curve", "survival_curve"),
    ]


def test_what_cannot_be_checked_gives_exit_status_2_and_a_reason(consumer):
    execute(consumer, "drop table analytics.membership_curve")
    status, said = check(consumer, "--select", "membership_curve")
    assert status == 2 and "build the model with dbt first" in said
    status, said = check(consumer, "--select", "stg_memberships")
    assert status == 2 and "calls a Spellcurve macro" in said
    status, said = check(consumer, "--target", "nowhere")
    assert status == 2 and "Could not run: dbt" in said and "nowhere" in said
    status, said = check(consumer, "--vars", "[1]")
    assert status == 2 and "--vars is" in said
    done = CliRunner().invoke(app, ["check", "--project-dir", str(consumer.folder / "models")])
    assert done.exit_code == 2 and "There is no dbt_project.yml" in done.output
    with pytest.raises(ValueError, match="tolerance is"):
        check_project(consumer.folder, tolerance=2)
    with pytest.raises(CheckError, match=r"There is no dbt_project\.yml"):
        spellcurve.check_project(consumer.folder / "models")


def test_another_version_of_the_package_is_refused(consumer, monkeypatch):
    monkeypatch.setattr(spellcurve, "__version__", "9.9.9")
    found = verdicts(consumer, "membership_curve")["membership_curve"]
    assert found.verdict == UNCHECKED and "install both in one version" in found.note


def test_a_curve_of_millions_pulls_no_more_rows_than_it_has_durations(consumer, monkeypatch):
    consumer.write(
        "models/more/many_spells.sql",
        "select 'p' || (range % 3) as plan, 0 as entry, range % 97 as duration, range % 2 as event, "
        "1 as weight from range(2000000)",
    )
    consumer.write(
        "models/more/many_curve.sql", "{{ spellcurve.survival_curve(ref('many_spells'), by='plan') }}"
    )
    consumer.build("--select", "path:models/more")
    pulled = []
    query = Project.query

    def counted(project: Project, sql: str) -> list:
        rows = query(project, sql)
        pulled.append(len(rows))
        return rows

    monkeypatch.setattr(Project, "query", counted)
    assert verdicts(consumer, "many_curve")["many_curve"].verdict == AGREES
    assert sum(pulled) <= 2 * 3 * 97 + 3 * 97


# Where calls stand in SQL

COMMENT = '/* spellcurve {"macro": "survival_curve", "version": "0.1.0", "spells": "x", "by": []} */'


@pytest.mark.parametrize(
    ("sql", "whole", "text"),
    [
        (f"\n-- a note (of ours)\n{COMMENT}\nselect 1", True, None),
        (
            f"with x as (select ')'), y as ({COMMENT} select (1)) select * from y",
            False,
            "select (1)) select * from y",
        ),
        (f"select * from ({COMMENT} select (1)) as z", False, f"{COMMENT} select (1)"),
        (f"{COMMENT} select 1 union all {COMMENT} select 2", False, ""),
        (f"select 1 union all {COMMENT} select 2", False, ""),
    ],
)
def test_calls_are_found_wherever_they_stand(sql, whole, text):
    call = find_calls(sql, "it")[0]
    assert call.whole == whole
    assert call.sql.endswith(sql if text is None else text) and (text != "" or call.sql == "")
