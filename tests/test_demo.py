"""The demo: its invented records, its figures against lifelines, its exit statuses and its words."""

from __future__ import annotations

import shutil
from pathlib import Path

import duckdb
import pandas as pd
import pytest
from lifelines import KaplanMeierFitter
from lifelines.utils import median_survival_times, restricted_mean_survival_time
from spellcurve import __version__, demo, generate, package, summary
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


def test_demo_agrees(small, small_result):
    _, printed = small
    assert printed.exit_code == 0, printed.output
    assert len(small_result.readouts) >= 17
    said = f"✓ 9 curves, {len(small_result.readouts)} read-outs and 10 tables of causes, counts and states: "
    assert said in printed.output
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
    check_average(spells, group)
    for share in group.shares:
        if share.duration > group.follow_up and fitted.survival_function_.iloc[-1, 0] > 0:
            assert share == summary.ShareAt(share.duration, None, None, None, summary.BEYOND_FOLLOW_UP)
            continue
        assert share.survival == pytest.approx(fitted.predict(share.duration), rel=1e-9)
        bounds = fitted.confidence_interval_[fitted.confidence_interval_.index <= share.duration].iloc[-1]
        if 0 < share.survival < 1:
            assert [share.lower, share.upper] == pytest.approx(list(bounds), rel=1e-9)


def check_average(spells: pd.DataFrame, group: summary.GroupFigures) -> None:
    """The macro's mean is the area under the curve."""
    average = group.average
    fitted = KaplanMeierFitter().fit(spells["duration"], spells["event"], entry=spells["entry"])
    if average.horizon > group.follow_up and fitted.survival_function_.iloc[-1, 0] > 0:
        unknown = summary.AverageWithin(average.horizon, None, None, None, summary.BEYOND_FOLLOW_UP)
        assert average == unknown
        return
    assert average.status == summary.OBSERVED
    area = restricted_mean_survival_time(fitted, average.horizon)
    assert average.mean == pytest.approx(area, rel=1e-9)
    assert 0 <= average.lower <= average.mean <= average.upper <= average.horizon


def test_whether_groups_differ_is_told_and_was_compared(small, small_result):
    compared = {readout.model: readout.exact for readout in small_result.readouts}
    printed = " ".join(small[1].output.split())
    asked = [answer for answer in small_result.answers if answer.question.tests]
    assert [answer.question.tests for answer in asked] == ["demo_membership_log_rank", "demo_part_log_rank"]
    for answer in asked:
        everybody, *pairs = answer.tests
        assert f"{answer.question.differ} {summary.verdict_in_words(everybody)}" in printed
        assert pairs and all(summary.pair_in_words(pair) in printed for pair in pairs)
        assert compared[answer.question.tests].rows == len(answer.tests)
        assert compared[answer.question.tests].figures == 13 * len(answer.tests)
    assert asked[0].tests[0]["statistic"] == pytest.approx(two_plans_by_hand(small[0]), rel=1e-9)


def two_plans_by_hand(folder: Path) -> float:
    """Mantel's chi-square of the demo's two plans, late entry and all."""
    with duckdb.connect(str(folder / demo.DATABASE)) as connection:
        spells = connection.execute(f"from {demo.SCHEMA}.demo_membership_spells").df()
    household = spells["plan"] == "household"
    excess = variance = 0.0
    for t in sorted(spells["duration"][spells["event"] == 1].unique()):
        there = (spells["duration"] >= t) & ((spells["entry"] < t) | (t == 0) & (spells["entry"] == 0))
        ends = there & (spells["duration"] == t) & (spells["event"] == 1)
        n, d = there.sum(), ends.sum()
        share = (there & household).sum() / n if n else 0
        excess += (ends & household).sum() - d * share
        if n > 1:
            variance += d * (n - d) / (n - 1) * share * (1 - share)
    return excess**2 / variance


def test_what_is_said_of_tests_of_groups():
    row = {"weighting": "log-rank", "statistic": 16.79, "p_value": 0.0312, "status": "compared"}
    assert summary.verdict_in_words(row) == "yes (log-rank 16.8, p = 0.031)"
    assert summary.verdict_in_words(row | {"p_value": 0.06}) == "not shown (log-rank 16.8, p = 0.060)"
    nothing = {"weighting": "gehan", "statistic": None, "p_value": None, "status": "no_events"}
    assert summary.verdict_in_words(nothing) == "cannot be told (no events)"
    pair = {"group_a": "household", "group_b": "individual", "p_value_adjusted": 1e-9, "status": "compared"}
    limits = {"hazard_ratio": 0.651, "hazard_ratio_lower": 0.6, "hazard_ratio_upper": 0.71}
    told = "household at 0.65 times the rate of individual (0.60 to 0.71), p < 0.001"
    assert summary.pair_in_words(pair | limits) == told
    far = pair | limits | {"hazard_ratio": 0.2}
    assert summary.pair_in_words(far) == "household at less than a third of the rate of individual, p < 0.001"
    far = pair | limits | {"hazard_ratio": 3.5}
    assert summary.pair_in_words(far) == "household at more than 3 times the rate of individual, p < 0.001"
    none = pair | {"hazard_ratio": None, "p_value_adjusted": None, "status": "no_events"}
    assert summary.pair_in_words(none) == "household and individual: no events"


def test_a_wrong_test_of_groups_is_caught(copied):
    spoil(copied, "update demo_membership_log_rank set hazard_ratio = 1.5 where group_a is not null")
    printed = run("demo", "--folder", copied, "--check-only")
    assert printed.exit_code == 1
    assert "demo_membership_log_rank: 1 figures or rows disagree" in printed.output


def test_every_read_out_that_is_printed_was_compared(small, small_result):
    readouts = {readout.model: readout.exact for readout in small_result.readouts}
    for answer in small_result.answers:
        for reading in answer.question.readings:
            for model, figures in ((reading.shares, 8), (reading.quantiles, 4), (reading.means, 5)):
                with duckdb.connect(str(small[0] / demo.DATABASE)) as connection:
                    rows = connection.execute(f"select count(*) from {demo.SCHEMA}.{model}").fetchone()[0]
                assert readouts[model].rows == rows > 0
                assert readouts[model].figures == figures * rows
    figures = sum(table.exact.figures for table in small_result.tables)
    assert f"{figures:,} figures compared with exact fractions" in " ".join(small[1].output.split())


def test_every_table_of_causes_counts_and_states_was_compared(small, small_result):
    folder = SEEDS.parents[1] / "models" / "demo" / "ends"
    made = {sql.stem for sql in folder.glob("*.sql")} - {"demo_membership_spells_by_ending"}
    compared = {one.model: one.exact for one in small_result.checked_ends}
    assert set(compared) == {name for name in made if not name.endswith("_faulty")}
    with duckdb.connect(str(small[0] / demo.DATABASE)) as connection:
        for name, comparison in compared.items():
            rows = connection.execute(f"select count(*) from {demo.SCHEMA}.{name}").fetchone()[0]
            assert comparison.rows == rows > 0
            assert comparison.figures >= 3 * rows


def test_causes_loans_and_states_are_what_a_plain_count_gives(small, small_result):
    """Without estimators: causes and states by lifelines and by hand, loans by a sum over days at risk."""
    ends = small_result.ends
    with duckdb.connect(str(small[0] / demo.DATABASE)) as connection:
        spells = connection.execute(f"select * from {demo.SCHEMA}.demo_membership_spells").df()
        loans = connection.execute(
            f"select member_id, cast(lent_at as date) as lent_on from {demo.SCHEMA}.demo_loans "
            "where member_id is not null and lent_at is not null"
        ).df()
    counted = spells[(spells["entry"] < spells["duration"]) | (spells["duration"] == 0)]
    for plan, own in counted.groupby("plan"):
        shares = {row["cause"]: row["incidence"] for row in ends.leaving if row["plan"] == plan}
        assert shares == pytest.approx(incidences(own, demo.LEFT_BY), rel=1e-9)
        stay = next(row["survival"] for row in ends.staying if row["plan"] == plan)
        assert stay + sum(shares.values()) == pytest.approx(1, rel=1e-9)
        found = [row for row in ends.loans if row["plan"] == plan and row["duration"] <= 365][-1]
        assert found["mean_count"] == pytest.approx(loans_within(own, loans, 365), rel=1e-9)
    for duration in {row["duration"] for row in ends.states}:
        for plan in ("household", "individual"):
            own = [r for r in ends.states if r["duration"] == duration and r["plan"] == plan]
            assert not own or sum(row["share"] for row in own) == pytest.approx(1, rel=1e-9)
    assert {row["status"] for row in ends.tests} == {"compared"}


def incidences(spells: pd.DataFrame, by_day: int) -> dict[str, float]:
    """Aalen and Johansen's estimate, day by day, in plain floats."""
    survival, found = 1.0, dict.fromkeys(spells["cause"].dropna().unique(), 0.0)
    for day in range(by_day + 1):
        at_risk = ((spells["entry"] < day) | (spells["entry"] == 0)) & (spells["duration"] >= day)
        ended = spells[at_risk & (spells["duration"] == day) & (spells["event"] == 1)]
        for cause, count in ended["cause"].value_counts().items():
            found[cause] += survival * count / at_risk.sum()
        survival *= 1 - len(ended) / at_risk.sum()
    return found


def loans_within(spells: pd.DataFrame, loans: pd.DataFrame, by_day: int) -> float:
    """The sum over days of loans by the members of that day."""
    both = spells.merge(loans, left_on="subject_id", right_on="member_id")
    both = both[(both["lent_on"] >= both["started_at"]) & (both["lent_on"] <= both["last_seen_at"])]
    tenure = (both["lent_on"] - both["started_at"]).dt.days
    tenure = tenure[(tenure > both["entry"]) | (both["entry"] == 0)]
    total = 0.0
    for day, count in tenure[tenure <= by_day].value_counts().items():
        at_risk = ((spells["entry"] < day) | (spells["entry"] == 0)) & (spells["duration"] >= day)
        total += count / at_risk.sum()
    return total


def test_young_cohorts_have_cells_that_have_not_matured(small):
    with duckdb.connect(str(small[0] / demo.DATABASE)) as connection:
        cohorts = connection.execute(
            f"select cohort, duration, status, survival from {demo.SCHEMA}.demo_membership_cohorts"
        ).df()
    assert set(cohorts["status"]) == {"observed", "beyond_follow_up"}
    assert (cohorts["survival"].isna() == (cohorts["status"] == "beyond_follow_up")).all()
    assert cohorts["cohort"].min() == pd.Timestamp("2020-07-01")  # since when memberships were watched
    observed = cohorts[cohorts["status"] == "observed"].groupby("cohort")["duration"].max()
    assert observed.iloc[0] == 1095 > observed.iloc[-2]


def test_printed_figures_are_the_result_s(small, small_result):
    text = " ".join(small[1].output.split())
    assert "400 members are on its books" in text
    assert f"{small_result.still_members:,} were still members on 1 June 2026" in text
    ends = small_result.ends
    assert len(ends.leaving) == 8 and len(ends.loan_differences) == len(demo.LOANS_AT)
    for row in ends.leaving:
        assert summary.incidence_in_words(row) in text
    for row in ends.loan_differences:
        assert summary.ratio_in_words(row) in text
    for row in ends.tests:
        assert summary.chance_in_words(row["p_value"], row["status"]) in text
    for plan in ("household", "individual"):
        loans = [row for row in ends.loans if row["plan"] == plan]
        assert all(summary.count_in_words(loans, duration) in text for duration in demo.LOANS_AT)
        states = [row for row in ends.states if row["plan"] == plan]
        for duration in demo.STATES_AT:
            words = summary.states_in_words(states, demo.STATES, duration)
            assert f"after {duration} days {' '.join(words)}" in text
    for answer in small_result.answers:
        assert answer.question.title in text
        for group in answer.groups:
            assert summary.half_in_words(group.half) in text
            assert summary.average_in_words(group.average) in text
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


#: What can go wrong in a read-out, and what has to be said about it.
SPOILT = {
    "update demo_membership_shares set survival = survival * (1 + 2e-9) where duration = 90": (
        "survival at duration 90 is"
    ),
    "update demo_membership_shares_by_plan set status = 'beyond_follow_up' where duration = 365": (
        "status at plan household, duration 365 is beyond_follow_up, but observed is expected."
    ),
    "update demo_part_shares set survival = null where part = 'planer knife' and duration = 500": (
        "survival at part planer knife, duration 500 is null, but "
    ),
    "update demo_part_quantiles set duration = 9999 where part = 'drive belt' and share = 0.5": (
        "duration at part drive belt, share 0.5 is 9999, but null is expected."
    ),
    "update demo_membership_quantiles set duration_upper = duration_upper + 1 where share = 0.5": (
        "duration_upper at share 0.5 is"
    ),
    "update demo_first_loan_means set restricted_mean_lower = 0 where plan = 'household'": (
        "restricted_mean_lower at plan household, horizon 365 is 0.0, but"
    ),
    "update demo_membership_means set std_error = 'nan'": "std_error at horizon 365 is nan, but",
    "delete from demo_membership_means_by_plan where plan = 'individual'": (
        "The row at plan individual, horizon 365 is missing from the table."
    ),
    "insert into demo_part_shares select * from demo_part_shares where duration = 100": (
        "The row at part drive belt, duration 100 is in the table more than once."
    ),
    "update demo_first_loan_quantiles set share = 0.6 where share = 0.5": (
        "The row at plan household, share 0.6 should not be in the table."
    ),
    "update demo_membership_cohorts set naive_event_share = 0 where cohort = '2021-01-01'": (
        "naive_event_share at cohort 2021-01-01, duration 730 is 0.0, but"
    ),
    "update demo_membership_hazards set hazard_upper = 1 where from_duration = 0": (
        "hazard_upper at plan household, from_duration 0 is 1.0, but"
    ),
    "update demo_lapse_causes set incidence = incidence * (1 + 2e-9) where cause = 'cost'": (
        "incidence at plan household, cause cost, duration "
    ),
    "update demo_lapse_causes_shares set incidence = null where cause = 'moved' and duration = 365": (
        "incidence at plan household, cause moved, duration 365 is null, but "
    ),
    "update demo_lapse_causes_hazards set hazard = 0 where cause = 'unused'": (
        "hazard at plan household, cause unused, duration "
    ),
    "update demo_lapse_causes_stacked set share_from = 0.5 where part = 'still a member'": (
        "share_from at plan household, duration 0, part still a member is 0.5, but "
    ),
    "update demo_lapse_causes_gray set p_value = 0.5 where ending = 'cost'": (
        "p_value at ending cost is 0.5, but"
    ),
    "update demo_lapse_causes_log_rank set observed_a = 0 where comparison <> 'all groups'": (
        "observed_a at ending cost, comparison household vs individual is 0.0, but"
    ),
    "update demo_loan_counts set std_error = std_error * 1.00001 where plan = 'individual'": (
        "std_error at plan individual, duration "
    ),
    "update demo_loan_count_differences set ratio_upper = 9 where duration = 365": (
        "ratio_upper at group_a household, duration 365 is 9.0, but"
    ),
    "update demo_membership_states set share = share + 1e-8 where state = 'paused'": (
        "share at plan household, state paused, duration 0 is 1e-08, but 0 is expected."
    ),
    "delete from demo_part_life_table where from_duration = 100": (
        "The row at part drive belt, from_duration 100 is missing from the table."
    ),
}


def test_whatever_is_wrong_in_a_read_out_is_found(copied):
    for sql in SPOILT:
        spoil(copied, sql)
    result = demo.run_demo(copied, check_only=True)
    assert not result.agrees
    for sql, says in SPOILT.items():
        table = next(word for word in sql.split() if word.startswith("demo_"))
        assert any(sentence.startswith(says) for sentence in result.disagreements[table]), says
    assert not any(curve.wrong for curve in result.checked)


def test_a_wrong_read_out_is_printed_as_it_stands_and_gives_exit_status_1(copied):
    spoil(copied, "update demo_membership_shares set survival = 0.123 where duration = 90")
    spoil(copied, "update demo_membership_means set restricted_mean = 12, restricted_mean_lower = 3")
    spoil(copied, "update demo_membership_quantiles set duration = 4321 where share = 0.5")
    printed = run("demo", "--folder", copied, "--check-only")
    assert printed.exit_code == 1
    assert all(words in printed.output for words in ("12.3% (", "12 (3 to ", "4,321 ("))
    assert "✗ 9 curves, " in printed.output and " read-outs and 10 tables" in printed.output
    assert "demo_membership_shares: 1 figures or rows disagree" in printed.output
    assert "survival at duration 90 is 0.123, but" in " ".join(printed.output.split())


def test_a_lost_source_row_gives_exit_status_1_through_the_tests(copied):
    spoil(copied, "delete from demo_roll_spells_faulty where fault = 'no_subject'")
    printed = run("demo", "--folder", copied, "--check-only")
    assert printed.exit_code == 1
    assert "✓ 9 curves" in printed.output
    assert "33 of 34 dbt tests passed" in printed.output
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
    monkeypatch.setattr(package, "__file__", str(tmp_path / "package.py"))
    printed = run("demo", "--folder", tmp_path / "demo", *SMALL)
    assert printed.exit_code == 2
    assert "Could not run: dbt run failed at demo_joiners" in printed.output


# Words


def test_a_package_that_is_not_there_gives_exit_status_2(tmp_path, monkeypatch):
    monkeypatch.setattr(package, "__file__", str(tmp_path / "a" / "b" / "package.py"))
    printed = run("demo", "--folder", tmp_path / "demo")
    assert printed.exit_code == 2
    assert "Could not run: There is no dbt_project" in printed.output


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


def row_of_half(duration: int | None, lower: int | None, upper: int | None, status: str) -> dict:
    return {
        "share": 0.5,
        "duration": duration,
        "duration_lower": lower,
        "duration_upper": upper,
        "status": status,
    }


@pytest.mark.parametrize(
    ("row", "words"),
    [
        (row_of_half(9, 9, 20, "reached"), "9 (9 to 20)"),
        (row_of_half(1009, 999, None, "reached"), "1,009 (999 or more)"),
        (row_of_half(9, None, None, "reached"), "9"),
        (row_of_half(None, 9, None, "not_reached"), "not reached"),
        (row_of_half(None, None, None, "too_few_at_risk"), "too few at risk"),
        ({**row_of_half(3, 2, 4, "reached"), "share": 0.25}, "missing from the table"),
    ],
)
def test_half_in_words(row, words):
    assert summary.half_in_words(summary.time_to_half([row])) == words


@pytest.mark.parametrize(
    ("survival", "lower", "upper", "status", "words"),
    [
        (0.8, 0.6, 0.9, "observed", "80.0% (60.0 to 90.0)"),
        (1.0, 1.0, 1.0, "observed", "100.0%"),
        (0.0, None, None, "observed", "0.0%"),
        (None, None, None, "beyond_follow_up", "not yet observable"),
        (None, None, None, "too_few_at_risk", "too few at risk"),
        (None, None, None, "several_curves", "several curves in one"),
    ],
)
def test_shares_in_words(survival, lower, upper, status, words):
    row = {"survival": survival, "survival_lower": lower, "survival_upper": upper, "status": status}
    found = summary.share_at([{"duration": 3, **row}, {"duration": 30, **row}], 30)
    assert found == summary.ShareAt(30, survival, lower, upper, status)
    assert summary.share_in_words(found) == words
    assert summary.share_in_words(summary.share_at([], 30)) == "missing from the table"


@pytest.mark.parametrize(
    ("mean", "lower", "upper", "status", "words"),
    [
        (310.86, 306.6, 1315.1, "observed", "311 (307 to 1,315)"),
        (365.0, 365.0, 365.0, "observed", "365"),
        (310.86, None, None, "observed", "311"),
        (None, None, None, "beyond_follow_up", "not yet observable"),
        (None, None, None, "none_survived", "nobody left"),
    ],
)
def test_averages_in_words(mean, lower, upper, status, words):
    row = {
        "horizon": 365,
        "restricted_mean": mean,
        "restricted_mean_lower": lower,
        "restricted_mean_upper": upper,
    }
    found = summary.average_within([{**row, "status": status}], 365)
    assert summary.average_in_words(found) == words
    assert summary.average_within([], 365).status == summary.MISSING
