"""The demo: its invented records, its figures against lifelines, its exit statuses and its words."""

from __future__ import annotations

import shutil
from pathlib import Path

import duckdb
import pandas as pd
import pytest
from lifelines import KaplanMeierFitter
from lifelines.utils import median_survival_times
from spellcurve import __version__, demo, generate, summary
from spellcurve.cli import app
from typer.testing import CliRunner

SEEDS = Path(__file__).resolve().parents[1] / "seeds" / "demo"
MEBIBYTE = 2**20
SMALL = ["--members", "400", "--seed", "7"]


def run(*arguments: str | Path):
    return CliRunner().invoke(app, [str(argument) for argument in arguments], env={"COLUMNS": "100"})


@pytest.fixture(scope="module")
def small(tmp_path_factory):
    """A demo of 400 members, from the command line: its folder and what it printed."""
    folder = tmp_path_factory.mktemp("small") / "demo"
    return folder, run("demo", "--folder", folder, *SMALL)


@pytest.fixture(scope="module")
def small_result(small):
    return demo.run_demo(small[0], check_only=True)


@pytest.fixture
def copied(small, tmp_path):
    """A copy of the small demo, to be spoilt."""
    return Path(shutil.copytree(small[0], tmp_path / "moved"))


def spoil(folder: Path, sql: str) -> None:
    with duckdb.connect(str(folder / demo.DATABASE)) as connection:
        connection.execute(f"set schema = '{demo.SCHEMA}'")
        assert connection.execute(sql).fetchone() != (0,)


# Records


def test_seeds_are_what_the_generator_gives(tmp_path):
    written = generate.write_seeds(tmp_path)
    committed = sorted(SEEDS.glob("*.csv"))
    assert sorted(path.name for path in written) == [path.name for path in committed]
    for path in committed:
        assert path.read_bytes() == (tmp_path / path.name).read_bytes(), path.name


def test_seeds_stay_small():
    sizes = [path.stat().st_size for path in SEEDS.glob("*.csv")]
    assert max(sizes) < MEBIBYTE
    assert sum(sizes) < 3 * MEBIBYTE


@pytest.mark.parametrize("members", [generate.FEWEST_MEMBERS, 1_234])
def test_generator_gives_the_size_asked_for_and_depends_on_the_seed(members):
    rows = {}
    for seed in (1, 1, 2):
        with duckdb.connect() as connection:
            generate.write_tables(connection, "main", members, seed)
            joined = connection.execute("select count(joined_on) from demo_members").fetchone()
            assert joined == (members,)
            found = [connection.execute(f"select * from {name}").fetchall() for name in generate.TABLES]
            assert all(found)
            rows.setdefault(seed, []).append(found)
    assert rows[1][0] == rows[1][1]
    assert rows[1][0] != rows[2][0]


@pytest.mark.parametrize(
    ("members", "seed", "says"),
    [(49, 1, "members is 49"), (1_000_001, 1, "1,000,001"), (100, -1, "seed is -1")],
)
def test_generator_refuses_other_sizes_and_seeds(members, seed, says):
    with duckdb.connect() as connection, pytest.raises(ValueError, match=says):
        generate.write_tables(connection, "main", members, seed)


def test_seeds_loaded_by_dbt_are_the_generator_s_tables(tmp_path):
    """The default demo reads the committed seeds, any other generated tables: the same, types included."""
    printed = run("demo", "--folder", tmp_path)
    assert printed.exit_code == 0, printed.output
    assert all(words in printed.output for words in ("3,000 members", "not reached", "not yet observable"))
    with duckdb.connect(str(tmp_path / demo.DATABASE)) as connection:
        generate.write_tables(connection, "generated")
        for name in generate.TABLES:
            tables = f"{demo.SCHEMA}.{name}", f"generated.{name}"
            kinds = [connection.execute(f"describe {table}").fetchall() for table in tables]
            assert kinds[0] == kinds[1], name
            loaded, generated = (
                connection.execute(f"select * from {table} order by all").fetchall() for table in tables
            )
            assert loaded == generated, name


# Figures


def test_demo_agrees(small):
    _, printed = small
    assert printed.exit_code == 0, printed.output
    assert "✓ 9 curves" in printed.output
    assert "✗" not in printed.output


def test_every_figure_of_every_curve_was_compared(small, small_result):
    with duckdb.connect(str(small[0] / demo.DATABASE)) as connection:
        names = connection.execute(
            "select table_name from information_schema.tables where contains(table_name, '_survival')"
        ).fetchall()
        rows = {
            name: connection.execute(f"select count(*) from {demo.SCHEMA}.{name}").fetchone()[0]
            for (name,) in names
        }
    assert {curve.model: curve.exact.rows for curve in small_result.checked} == rows
    for curve in small_result.checked:
        assert curve.exact.figures == 10 * rows[curve.model]
        assert sum(one.rows for one in curve.independent) == rows[curve.model]
        assert sum(one.figures for one in curve.independent) >= 6 * rows[curve.model]
    assert 0 < small_result.largest_difference < 1e-10


def test_membership_figures_are_those_of_lifelines(small, small_result):
    with duckdb.connect(str(small[0] / demo.DATABASE)) as connection:
        spells = connection.execute(f"select * from {demo.SCHEMA}.demo_membership_spells").df()
    groups = {group.label: group for group in small_result.answers[0].groups}
    assert list(groups) == ["everybody", "household", "individual"]
    assert small_result.members == 400
    assert small_result.still_members == (spells["event"] == 0).sum()
    for label, group in groups.items():
        own = spells if label == "everybody" else spells[spells["plan"] == label]
        check_group(own, group)


def test_first_loan_and_part_figures_are_those_of_lifelines(small, small_result):
    for answer, by in zip(small_result.answers[1:], ("plan", "part"), strict=True):
        with duckdb.connect(str(small[0] / demo.DATABASE)) as connection:
            spells = connection.execute(f"select * from {demo.SCHEMA}.{answer.question.spells}").df()
        assert [group.label for group in answer.groups] == sorted(spells[by].unique())
        for group in answer.groups:
            check_group(spells[spells[by] == group.label], group)


def check_group(spells: pd.DataFrame, group: summary.GroupFigures) -> None:
    assert group.spells == len(spells)
    assert group.open_spells == (spells["event"] == 0).sum()
    spells = spells[(spells["entry"] < spells["duration"]) | (spells["duration"] == 0)]
    fitted = KaplanMeierFitter().fit(spells["duration"], spells["event"], entry=spells["entry"])
    limits = median_survival_times(fitted.confidence_interval_).iloc[0]
    expected = [fitted.median_survival_time_, *limits]
    found = [group.half.duration, group.half.lower, group.half.upper]
    assert [float("inf") if one is None else one for one in found] == expected
    assert group.follow_up == spells["duration"].max()
    for share in group.shares:
        if share.duration > group.follow_up and fitted.survival_function_.iloc[-1, 0] > 0:
            assert share == summary.ShareAt(share.duration, None, None, None, summary.BEYOND_FOLLOW_UP)
            continue
        assert share.survival == pytest.approx(fitted.predict(share.duration), rel=1e-9)
        bounds = fitted.confidence_interval_[fitted.confidence_interval_.index <= share.duration].iloc[-1]
        if 0 < share.survival < 1:
            assert [share.lower, share.upper] == pytest.approx(list(bounds), rel=1e-9)


def test_printed_figures_are_the_result_s(small, small_result):
    text = " ".join(small[1].output.split())
    assert "400 members are on its books" in text
    assert f"{small_result.still_members:,} were still members on 1 June 2026" in text
    for answer in small_result.answers:
        assert answer.question.title in text
        for group in answer.groups:
            assert summary.half_in_words(group) in text
            assert all(summary.share_in_words(share) in text for share in group.shares)


def test_refused_rows_are_counted_and_explained(small, small_result):
    text = " ".join(small[1].output.split())
    with duckdb.connect(str(small[0] / demo.DATABASE)) as connection:
        for refusals in small_result.refusals:
            used, refused, rows = connection.execute(
                f"select (select sum(source_rows) from {demo.SCHEMA}.{refusals.spells}), "
                f"(select count(*) from {demo.SCHEMA}.{refusals.spells}_faulty), "
                + " + ".join(f"(select count(*) from {demo.SCHEMA}.{name})" for name in refusals.sources)
            ).fetchone()
            assert refusals.refused == refused > 0
            assert refusals.rows == rows == used + refused
            for fault, count in refusals.faults.items():
                assert f"{summary.FAULTS_IN_WORDS[fault]} ({count:,})" in text


def test_all_six_builders_and_many_faults_are_shown(small_result):
    builders = {
        sql.read_text().split("(")[0].rsplit(".", 1)[-1]
        for sql in (SEEDS.parents[1] / "models" / "demo" / "spells").glob("*.sql")
    }
    assert builders == {
        "spells_from_activity",
        "spells_from_durations",
        "spells_from_event_log",
        "spells_from_intervals",
        "spells_from_status_history",
        "spells_to_first_event",
    }
    assert len({fault for refusals in small_result.refusals for fault in refusals.faults}) >= 20


# Exit statuses


def test_a_wrong_figure_gives_exit_status_1(copied):
    spoil(copied, "update demo_part_survival set survival = survival * 0.999999 where duration = 0")
    printed = run("demo", "--folder", copied, "--check-only")
    assert printed.exit_code == 1
    assert "✗ 9 curves" in printed.output
    assert "demo_part_survival: 3 figures or rows disagree" in printed.output  # one for each part
    assert "survival at part = drive belt, duration 0 is" in " ".join(printed.output.split())


def test_a_missing_row_gives_exit_status_1(copied):
    spoil(copied, "delete from demo_membership_survival where duration = 0")
    printed = run("demo", "--folder", copied, "--check-only")
    assert printed.exit_code == 1
    assert "is missing from the table" in " ".join(printed.output.split())


def test_a_lost_source_row_gives_exit_status_1_through_the_tests(copied):
    spoil(copied, "delete from demo_roll_spells_faulty where fault = 'no_subject'")
    printed = run("demo", "--folder", copied, "--check-only")
    assert printed.exit_code == 1
    assert "✓ 9 curves" in printed.output
    assert "29 of 30 dbt tests passed" in printed.output
    assert "every_row_accounted_for" in printed.output


def test_an_untouched_copy_still_agrees_whatever_the_user_s_own_dbt_settings(copied, monkeypatch):
    for name, value in {"DBT_WARN_ERROR": "true", "DBT_TARGET": "nowhere", "DBT_FAIL_FAST": "true"}.items():
        monkeypatch.setenv(name, value)
    assert run("demo", "--folder", copied, "--check-only").exit_code == 0


def test_what_cannot_run_gives_exit_status_2_and_one_sentence(copied, tmp_path):
    (copied / demo.DATABASE).write_bytes(b"no database")
    taken = tmp_path / "taken"
    taken.mkdir()
    (taken / "profiles.yml").write_text("mine: {}\n")
    (tmp_path / "file").write_text("")
    for folder, arguments, says in (
        (copied, ["--check-only"], "dbt"),
        (tmp_path / "nothing", ["--check-only"], "There is no finished demo in"),
        (taken, SMALL, "is not the demo's own"),
        (tmp_path / "file", SMALL, "cannot be used"),
    ):
        printed = run("demo", "--folder", folder, *arguments)
        assert printed.exit_code == 2, printed.output
        assert "Could not run: " in printed.output
        assert says in printed.output
        assert "Traceback" not in printed.output
    assert (taken / "profiles.yml").read_text() == "mine: {}\n"


def test_models_that_fail_give_exit_status_2(tmp_path, monkeypatch):
    project = tmp_path / "dbt_package"
    for name in ("macros", "models", "seeds"):
        shutil.copytree(SEEDS.parents[1] / name, project / name)
    shutil.copy(SEEDS.parents[1] / "dbt_project.yml", project)
    (project / "models" / "demo" / "staging" / "demo_joiners.sql").write_text("select nonsense")
    monkeypatch.setattr(demo, "__file__", str(tmp_path / "demo.py"))
    assert demo.find_project() == project
    printed = run("demo", "--folder", tmp_path / "demo", *SMALL)
    assert printed.exit_code == 2
    assert "Could not run: dbt run failed at demo_joiners" in printed.output


# Words


def test_project_is_found_in_the_checkout_or_reported_missing(tmp_path, monkeypatch):
    assert demo.find_project() == SEEDS.parents[1]
    monkeypatch.setattr(demo, "__file__", str(tmp_path / "a" / "b" / "demo.py"))
    with pytest.raises(demo.DemoError, match="There is no dbt_project"):
        demo.find_project()


def test_help_mentions_every_option():
    printed = run("demo", "--help")
    assert printed.exit_code == 0
    for option in ("--folder", "--members", "--seed", "--check-only"):
        assert option in printed.output
    assert "Exit status: 0 all figures agree, 1 some do not, 2 the demo could not run." in printed.output
    assert "demo" in run("--help").output


def test_version():
    assert run("--version").output == f"spellcurve {__version__}\n"


@pytest.mark.parametrize(
    "arguments", [["--members", "5"], ["--seed", "-1"], ["--members", "many"], ["--colour"]]
)
def test_wrong_options_give_exit_status_2(arguments):
    assert run("demo", *arguments).exit_code == 2


def rows(*points: tuple[int, float | None, float | None, float | None]) -> list[dict]:
    return [
        dict(zip(("duration", "survival", "survival_lower", "survival_upper"), one, strict=True))
        for one in points
    ]


FALLING = rows((0, 1.0, 1.0, 1.0), (4, 0.8, 0.6, 0.9), (9, 0.5 * (1 + 1e-12), 0.3, 0.7), (12, 0.4, 0.2, 0.6))


def test_half_is_reached_at_the_level_itself_despite_rounding():
    group = summary.figures("all", FALLING, 10, 4, [4])
    assert group.half == summary.TimeToHalf(9, 9, None, summary.REACHED)
    assert summary.half_in_words(group) == "9 (9 or more)"
    ended = summary.figures("all", [*FALLING, *rows((20, 0.1, 0.01, 0.5))], 10, 4, [4])
    assert summary.half_in_words(ended) == "9 (9 to 20)"


def test_half_not_reached_is_said():
    group = summary.figures("all", FALLING[:2], 10, 9, [])
    assert group.half == summary.TimeToHalf(None, None, None, summary.NOT_REACHED)
    assert summary.half_in_words(group) == "not reached"


@pytest.mark.parametrize(
    ("duration", "words"),
    [
        (0, "100.0%"),
        (3, "100.0%"),
        (4, "80.0% (60.0 to 90.0)"),
        (12, "40.0% (20.0 to 60.0)"),
        (13, "not yet observable"),
    ],
)
def test_shares_are_read_as_steps_and_not_beyond_follow_up(duration, words):
    assert summary.share_in_words(summary.share_at(FALLING, duration)) == words


def test_a_share_that_has_reached_0_stays_known():
    curve = [*FALLING, *rows((20, 0.0, None, None))]
    assert summary.share_at(curve, 500) == summary.ShareAt(500, 0.0, None, None, summary.OBSERVED)
    assert summary.share_in_words(summary.share_at(curve, 500)) == "0.0%"


def test_hidden_estimates_are_not_made_up():
    curve = [*FALLING, *rows((20, None, None, None))]
    assert summary.share_in_words(summary.share_at(curve, 20)) == "not yet observable"
