"""The reference models, built with dbt on DuckDB, against published figures, lifelines and exact arithmetic.

Sources of the data and of the printed figures are in docs/sources.md. The data sets that lifelines carries
are compared with its copies, so that a seed cannot drift from its source.
"""

from __future__ import annotations

import csv
import re
import shutil
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import duckdb
import lifelines.datasets
import lifelines.exceptions
import numpy as np
import pandas as pd
import pytest
import yaml
from dbt.cli.main import dbtRunner, dbtRunnerResult
from lifelines import KaplanMeierFitter, NelsonAalenFitter
from lifelines.statistics import logrank_test
from scipy.stats import norm
from spellcurve import exact

PACKAGE = Path(__file__).resolve().parents[1]
SEEDS = PACKAGE / "seeds" / "reference"
MODELS = PACKAGE / "models" / "reference"
Z = norm.ppf(0.975)
BOUNDS = ["survival_lower", "survival_upper"]
RATIONAL = [
    "at_risk",
    "events",
    "censored",
    "hazard",
    "survival",
    "std_error",
    *BOUNDS,
    "cumulative_hazard",
    "cumulative_hazard_std_error",
]
# lifelines declines to fit a curve whose risk set empties early; exact arithmetic and the hazard cover it.
EMPTIED_EARLY = ("channing_house", "male")
# Data sets whose figures are read off another table than a curve.
ELSEWHERE = {"kidney_cancer": "reference_kidney_cancer_table", "valve_seats": "reference_valve_seats_counts"}
OF_TESTS = ("log_rank_statistic", "log_rank_p_value", "gehan_statistic", "observed_events", "expected_events")
QUANTILE_COLUMNS = {"median": "survival", "median_lower": "survival_lower", "median_upper": "survival_upper"}


@dataclass(frozen=True)
class Curve:
    """One curve model: the data set it is of, its group column if it has one, and its options."""

    data_set: str
    group: str | None = None
    interval_scale: str = "log-log"
    grid: str = "steps"

    @property
    def model(self) -> str:
        overall = "_overall" if self.group is None and GROUPS[self.data_set] else ""
        return f"reference_{self.data_set}{overall}_curve"


GROUPS = {
    "remission": "arm",
    "eight_observations": None,
    "two_samples": "sample_name",
    "maintenance": "arm",
    "channing_house": "sex",
    "aids_cohort": None,
    "lung_cancer": "sex",
    "fly_lifetimes": "strain",
    "diesel_fans": None,
    "melanoma": None,
}
CURVES = (
    Curve("remission", "arm"),
    Curve("eight_observations"),
    Curve("two_samples", "sample_name"),
    Curve("two_samples"),
    Curve("maintenance", "arm", interval_scale="log"),
    Curve("channing_house", "sex"),
    Curve("aids_cohort"),
    Curve("lung_cancer", "sex", interval_scale="log"),
    Curve("lung_cancer", interval_scale="log", grid="every"),
    Curve("fly_lifetimes", "strain"),
    Curve("fly_lifetimes"),
    Curve("diesel_fans"),
    Curve("melanoma"),
)
TESTS = PACKAGE / "tests" / "dbt" / "reference"
# Every file is a node; tests in the .yml: each spell table is sound, and two columns are never null.
EVERYTHING = {
    "seed": len(list(SEEDS.glob("*.csv"))),
    "model": len(list(MODELS.glob("*.sql"))),
    "test": len(list(TESTS.glob("*.sql"))) + len(list(MODELS.glob("*_spells.sql"))) + 2,
}
NAMES_IN_SEEDS = {"completed_years": "duration", "fans": "weight", "patients": "weight"}


@dataclass(frozen=True)
class Project:
    """A copy of the package's reference part in a folder of its own, with a database beside it."""

    folder: Path

    def dbt(self, *arguments: str) -> dbtRunnerResult:
        place = ["--project-dir", str(self.folder), "--profiles-dir", str(self.folder)]
        chosen = ["--vars", "{spellcurve_reference: true}"]
        return dbtRunner().invoke(["--quiet", *arguments, *place, *chosen])

    def table(self, name: str) -> pd.DataFrame:
        with duckdb.connect(str(self.folder / "published.duckdb")) as connection:
            return connection.sql(f"select * from reference.{name}").df()


def copied_to(folder: Path) -> Project:
    for part in ("macros", "models/reference", "seeds/reference", "tests/dbt/reference"):
        shutil.copytree(PACKAGE / part, folder / part)
    shutil.copy(PACKAGE / "dbt_project.yml", folder)
    output = {
        "type": "duckdb",
        "path": str(folder / "published.duckdb"),
        "schema": "reference",
        "threads": 1,
    }
    profile = {"spellcurve": {"target": "dev", "outputs": {"dev": output}}}
    (folder / "profiles.yml").write_text(yaml.safe_dump(profile))
    return Project(folder)


def failures(result: dbtRunnerResult) -> str:
    nodes = getattr(result.result, "results", None) or []
    said = [
        f"{node.node.unique_id}: {node.message}" for node in nodes if node.status not in ("success", "pass")
    ]
    return "\n".join([*said, str(result.exception or "")])


def kinds_of_nodes(result: dbtRunnerResult) -> dict[str, int]:
    return dict(Counter(node.node.resource_type.value for node in result.result.results))


def without_usage_statistics() -> pytest.MonkeyPatch:
    patch = pytest.MonkeyPatch()
    patch.setenv("DBT_SEND_ANONYMOUS_USAGE_STATS", "false")
    return patch


@dataclass(frozen=True)
class Built(Project):
    """The project after a build, and how that went."""

    result: dbtRunnerResult


@pytest.fixture(scope="module")
def built(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Built]:
    patch = without_usage_statistics()
    project = copied_to(tmp_path_factory.mktemp("published") / "project")
    yield Built(project.folder, project.dbt("build"))
    patch.undo()


@pytest.fixture(scope="module")
def tables(built: Built) -> dict[str, pd.DataFrame]:
    return {curve.model: built.table(curve.model) for curve in CURVES}


def seed(name: str) -> pd.DataFrame:
    """Read the seed of a data set, with entry 0 and weight 1 where it has no such column."""
    frame = pd.read_csv(SEEDS / f"reference_{name}.csv").rename(columns=NAMES_IN_SEEDS)
    return frame.assign(entry=frame.get("entry", 0), weight=frame.get("weight", 1))


def published() -> list[dict[str, str]]:
    with (SEEDS / "reference_published_figures.csv").open(newline="") as lines:
        return list(csv.DictReader(lines))


def each_group(curve: Curve, table: pd.DataFrame) -> Iterator[tuple[pd.DataFrame, pd.DataFrame]]:
    """Yield the data and the curve's rows of every group, by duration."""
    data = seed(curve.data_set)
    if curve.group is None:
        yield data, table.sort_values("duration")
        return
    assert set(table[curve.group]) == set(data[curve.group])
    for value, own in data.groupby(curve.group):
        yield own, table[table[curve.group] == value].sort_values("duration")


def assert_equal(ours: pd.Series, theirs: object, tolerance: float) -> None:
    np.testing.assert_allclose(
        ours.to_numpy(float), np.asarray(theirs, float), rtol=tolerance, atol=tolerance, equal_nan=True
    )


every_curve = pytest.mark.parametrize("curve", CURVES, ids=lambda curve: curve.model)


def test_every_seed_model_and_test_of_the_reference_part_passes(built: Built) -> None:
    assert built.result.success, failures(built.result)
    assert kinds_of_nodes(built.result) == EVERYTHING


def test_a_depending_project_turns_the_reference_part_on_by_its_variable(tmp_path: Path) -> None:
    """Nothing of it may be left out there: dbt shows the project file of a dependency no variables."""
    patch = without_usage_statistics()
    copied_to(tmp_path / "package")
    depending = Project(tmp_path / "depending")
    depending.folder.mkdir()
    shutil.copy(tmp_path / "package" / "profiles.yml", depending.folder)
    (depending.folder / "dbt_project.yml").write_text(
        "name: depending\nversion: '1.0'\nconfig-version: 2\nprofile: spellcurve\n"
    )
    (depending.folder / "packages.yml").write_text("packages:\n  - local: ../package\n")
    assert depending.dbt("deps").success
    result = depending.dbt("build", "--select", "package:spellcurve")
    patch.undo()
    assert result.success, failures(result)
    assert kinds_of_nodes(result) == EVERYTHING


# Against independent estimators


@every_curve
def test_a_curve_has_a_row_at_each_duration_of_its_grid(
    curve: Curve, tables: dict[str, pd.DataFrame]
) -> None:
    for data, rows in each_group(curve, tables[curve.model]):
        at_some_time = data[(data.entry < data.duration) | (data.duration == 0)]
        expected = {0, *at_some_time.duration}
        if curve.grid == "every":
            expected = set(range(max(expected) + 1))
        assert rows.duration.tolist() == sorted(expected)


def known_to_lifelines(data: pd.DataFrame, rows: pd.DataFrame) -> tuple[pd.DataFrame, pd.DataFrame, dict]:
    """Leave out what lifelines has no word for, and give the arguments of its fitters.

    It refuses spells that end as they enter (they are never at risk), and has no curve before anyone enters.
    """
    data = data[data.entry < data.duration]
    before_anyone = rows.duration < data.entry.min()
    assert (rows[before_anyone].survival == 1).all()
    arguments = {"event_observed": data.event, "weights": data.weight}
    if data.entry.any():
        arguments["entry"] = data.entry
    return data, rows[~before_anyone], arguments


@every_curve
def test_a_curve_agrees_with_the_product_limit_estimate_of_lifelines(
    curve: Curve, tables: dict[str, pd.DataFrame]
) -> None:
    for data, rows in each_group(curve, tables[curve.model]):
        data, rows, arguments = known_to_lifelines(data, rows)
        if curve.group and (curve.data_set, data[curve.group].iloc[0]) == EMPTIED_EARLY:
            with pytest.raises(lifelines.exceptions.StatError, match="too few early truncation times"):
                KaplanMeierFitter().fit(data.duration, **arguments)
            continue
        estimate = KaplanMeierFitter().fit(data.duration, **arguments)
        survival = estimate.survival_function_at_times(rows.duration).to_numpy()
        assert_equal(rows.survival, survival, 1e-9)

        bounds = estimate.confidence_interval_
        bounds = bounds.reindex(bounds.index.union(rows.duration)).ffill().loc[rows.duration]
        inside = (survival > 0) & (survival < 1)
        assert inside.any()
        survival, (lower, upper) = survival[inside], bounds[inside].to_numpy().T
        spread = (np.log(-np.log(lower)) - np.log(-np.log(upper))) / 2 * -np.log(survival)
        if curve.interval_scale == "log":
            lower, upper = survival * np.exp(-spread), np.minimum(1, survival * np.exp(spread))
        assert_equal(rows.survival_lower[inside], lower, 1e-9)
        assert_equal(rows.survival_upper[inside], upper, 1e-9)
        assert_equal(rows.std_error[inside], survival * spread / Z, 1e-9)


@every_curve
def test_a_curve_is_certain_at_1_and_has_no_interval_at_0(
    curve: Curve, tables: dict[str, pd.DataFrame]
) -> None:
    rows = tables[curve.model]
    assert (rows.loc[rows.survival == 1, BOUNDS] == 1).all(axis=None)
    assert (rows.loc[rows.survival == 1, "std_error"] == 0).all()
    assert rows.loc[rows.survival == 0, [*BOUNDS, "std_error"]].isna().all(axis=None)
    assert rows.loc[rows.survival > 0, [*BOUNDS, "std_error"]].notna().all(axis=None)


@every_curve
def test_a_curve_agrees_with_the_cumulative_hazard_of_lifelines(
    curve: Curve, tables: dict[str, pd.DataFrame]
) -> None:
    for data, rows in each_group(curve, tables[curve.model]):
        data, rows, arguments = known_to_lifelines(data, rows)
        estimate = NelsonAalenFitter(nelson_aalen_smoothing=False).fit(data.duration, **arguments)
        assert_equal(rows.cumulative_hazard, estimate.cumulative_hazard_at_times(rows.duration), 1e-9)


@every_curve
def test_a_curve_agrees_with_exact_arithmetic(curve: Curve, tables: dict[str, pd.DataFrame]) -> None:
    for data, rows in each_group(curve, tables[curve.model]):
        columns = ["entry", "duration", "event", "weight"]
        spells = [exact.Spell(*map(int, row)) for row in data[columns].itertuples(index=False)]
        expected = exact.survival_curve(spells, interval_scale=curve.interval_scale, grid=curve.grid)
        assert rows.duration.tolist() == [row.duration for row in expected]
        for figure in RATIONAL:
            values = [getattr(row, figure) for row in expected]
            assert_equal(rows[figure], [np.nan if value is None else float(value) for value in values], 1e-10)


@pytest.mark.parametrize("data_set", GROUPS)
def test_every_row_of_a_data_set_is_one_spell(data_set: str, built: Built) -> None:
    data, group = seed(data_set), GROUPS[data_set]
    columns = [*([group] if group else []), "entry", "duration", "event", "weight"]
    assert rows_of(built.table(f"reference_{data_set}_spells")[columns]) == rows_of(data[columns])


# Against what was printed


def printed(row: dict[str, str]) -> float | None:
    return float(row["printed_value"]) if row["printed_value"] else None


def computed(row: dict[str, str], built: Built, tables: dict[str, pd.DataFrame]) -> float | None:
    """Find a published figure in our tables by other ways than the reference models, or None if not reached.

    A median or one of its limits is the first duration at which survival or the bound is at or below one half
    (Brookmeyer and Crowley 1982); a restricted mean is the area under the curve (Irwin 1949).
    """
    data_set, figure = row["data_set"], row["figure"]
    if data_set == "melanoma":
        return of_causes(row, built)
    if data_set in ELSEWHERE:
        rows = built.table(ELSEWHERE[data_set])
        at = "from_duration" if data_set == "kidney_cancer" else "duration"
        (value,) = rows.loc[rows[at] == int(row["duration"]), figure]
        return float(value)
    if figure in OF_TESTS:
        return of_two_groups(row)
    group = GROUPS[data_set] if row["group_value"] else None
    (model,) = {curve.model for curve in CURVES if (curve.data_set, curve.group) == (data_set, group)}
    rows = tables[model].sort_values("duration")
    if group:
        rows = rows[rows[group] == row["group_value"]]
    assert len(rows), f"{model} has no group {row['group_value']}"
    if figure == "total_events":
        return float(rows.events.sum())
    if figure in QUANTILE_COLUMNS:
        reached = rows[rows[QUANTILE_COLUMNS[figure]] <= 0.5 * (1 + 1e-9)]
        return float(reached.duration.iloc[0]) if len(reached) else None
    if figure.startswith("restricted_mean"):
        return area(rows, int(row["duration"]), figure)
    (value,) = rows.loc[rows.duration == int(row["duration"]), figure]
    return float(value)


def area(rows: pd.DataFrame, horizon: int, figure: str) -> float:
    """Sum up survival unit by unit, or the variance Σ A² d / (n (n - d)) event by event."""
    steps = rows.set_index("duration")
    survival = steps.survival.reindex(range(horizon), method="ffill")
    if figure == "restricted_mean":
        return float(survival.sum())
    events = steps[(steps.events > 0) & (steps.index < horizon) & (steps.survival > 0)]
    variance = sum(
        survival.loc[t:].sum() ** 2 * row.events / (row.at_risk * (row.at_risk - row.events))
        for t, row in events.iterrows()
    )
    return float(np.sqrt(variance))


def of_two_groups(row: dict[str, str]) -> float:
    """Take a test from lifelines, and observed and expected events from the numbers at risk."""
    data, column = seed(row["data_set"]), GROUPS[row["data_set"]]
    assert column
    if not row["group_value"]:
        (_, one), (_, other) = data.groupby(column)
        weighting = {"weightings": "wilcoxon"} if row["figure"].startswith("gehan") else {}
        found = logrank_test(one.duration, other.duration, one.event, other.event, **weighting)
        return float(found.p_value if row["figure"].endswith("p_value") else found.test_statistic)
    own = data[data[column] == row["group_value"]]
    if row["figure"] == "observed_events":
        return float(own.event.sum())
    ended = data[data.event == 1].duration
    return float(sum((own.duration >= t).sum() / (data.duration >= t).sum() for t in ended))


def of_causes(row: dict[str, str], built: Built) -> float:
    """Read a figure off the incidences; Gray's statistic has its own tests."""
    if row["figure"] == "gray_statistic":
        name = "gray" if row["group_value"] == "melanoma" else "gray_other"
        return float(built.table(f"reference_melanoma_{name}").statistic[0])
    rows = built.table("reference_melanoma_incidence").sort_values("duration")
    rows = rows[(rows.cause == row["group_value"]) & (rows.duration <= int(row["duration"]))]
    return float(rows["std_error" if row["figure"].endswith("std_error") else "incidence"].iloc[-1])


@pytest.mark.parametrize("data_set", [*(name for name in GROUPS if name != "aids_cohort"), *ELSEWHERE])
def test_our_tables_give_every_published_figure(
    data_set: str, built: Built, tables: dict[str, pd.DataFrame]
) -> None:
    rows = [row for row in published() if row["data_set"] == data_set]
    assert rows
    for row in rows:
        ours, theirs = computed(row, built, tables), printed(row)
        if ours is None or theirs is None:
            assert ours is theirs, f"{row} but computed {ours}"
        else:
            allowed = 0.5 * 10 ** -int(row["printed_decimals"]) + 1e-9
            assert abs(ours - theirs) <= allowed, f"{row} but computed {ours}"


def test_the_agreement_model_judges_every_published_figure(
    built: Built, tables: dict[str, pd.DataFrame]
) -> None:
    agreement = built.table("reference_agreement")
    keys = ["data_set", "group_value", "figure", "duration"]

    def key(row: dict[str, object]) -> tuple[str, ...]:
        return tuple("" if pd.isna(row[name]) else str(row[name]).removesuffix(".0") for name in keys)

    judged = {key(row): row for row in agreement.to_dict("records")}
    expected = {key(row): row for row in published()}
    assert len(agreement) == len(judged) == len(expected) == len(published())
    assert judged.keys() == expected.keys()
    for name, row in judged.items():
        assert row["verdict"] == "agrees" and row["agrees"] == 1, row
        ours = computed(expected[name], built, tables)
        theirs = None if pd.isna(row["computed_value"]) else row["computed_value"]
        assert theirs == (None if ours is None else pytest.approx(ours, rel=1e-12))


def test_a_wrong_or_missing_figure_fails_the_build(tmp_path: Path) -> None:
    patch = without_usage_statistics()
    project = copied_to(tmp_path / "project")
    spoiled = {
        "remission,6-MP,survival,6,0.858,3": "disagrees",
        "remission,6-MP,survival,8,0.807,3": "not found",
        "remission,6-MP,survival,,0.857,3": "not found",
        "remission,6-MP,median,23,23,0": "not found",
        "remission,6-MP,median,,,0": "disagrees",
        "remission,placebo,median_upper,,,0": "disagrees",
        "remission,6-MP,median_upper,,40,0": "disagrees",
        "remission,,survival,6,0.857,3": "not found",
        "lung_cancer,,median,,309,0": "disagrees",
        "lung_cancer,unknown,median,,310,0": "not found",
        "unknown,,median,,,0": "not found",
        "remission,6-MP,unheard_of,6,0.857,3": "not found",
    }
    with (project.folder / "seeds/reference/reference_published_figures.csv").open("a") as figures:
        figures.writelines(f"{row},spoiled,no\n" for row in spoiled)
    result = project.dbt("build")
    patch.undo()
    assert not result.success
    failed = [node for node in result.result.results if node.status == "fail"]
    assert [node.node.name for node in failed] == ["not_null_reference_agreement_agrees"]
    assert failed[0].failures == len(spoiled)
    agreement = project.table("reference_agreement")
    assert (agreement[agreement.source != "spoiled"].verdict == "agrees").all()
    verdicts = agreement[agreement.source == "spoiled"].verdict
    assert Counter(verdicts) == Counter(spoiled.values())
    assert agreement[agreement.source == "spoiled"].agrees.isna().all()


def test_at_least_eight_sources_are_cited_and_each_data_set_has_a_section_in_the_docs() -> None:
    with (SEEDS / "reference_sources.csv").open(newline="", encoding="utf-8") as lines:
        sources = list(csv.DictReader(lines))
    cited = [row["data_set"] for row in sources]
    with_figures = {row["data_set"] for row in published()}
    assert len(cited) == len(set(cited)) and with_figures <= set(cited)
    assert len({row["citation"] for row in sources if row["data_set"] in with_figures}) >= 8
    text = (PACKAGE / "docs" / "sources.md").read_text(encoding="utf-8")
    table = {
        cells[1].strip(): cells[3:5]
        for cells in (line.split("|") for line in text.splitlines() if line.startswith("| "))
        if len(cells) == 6
    }
    for name in cited:
        own = [row for row in published() if row["data_set"] == name]
        counts = [len(own), sum(row["from_memory"] == "yes" for row in own)]
        assert [int(cell) for cell in table[name]] == counts, name
        assert re.search(rf"^## .*\b{name}\b", text, re.M), f"docs/sources.md says nothing of {name}"


# What is known of the data sets besides


def test_the_men_of_channing_house_show_what_a_tiny_early_risk_set_does(
    tables: dict[str, pd.DataFrame],
) -> None:
    """Two men had entered by 781 months and both were dead by then: the curve is 0 for all others too."""
    rows = tables["reference_channing_house_curve"].set_index(["sex", "duration"]).loc["male"].sort_index()
    assert rows.loc[[777, 781], "at_risk"].tolist() == [2, 1]
    assert rows.loc[777, "survival"] == pytest.approx(0.5, rel=1e-12)
    assert (rows.loc[781:, "survival"] == 0).all()
    assert rows.at_risk.max() > 30


def test_nobody_is_at_risk_before_moving_in(tables: dict[str, pd.DataFrame]) -> None:
    rows = tables["reference_channing_house_curve"]
    assert (rows[rows.duration == 0].at_risk == 0).all()
    residents = seed("channing_house").groupby("sex").size()
    assert residents.to_dict() == {"male": 97, "female": 365}  # the data set's own description
    assert (rows.groupby("sex").at_risk.max() < residents).all()


def test_counting_late_entrants_from_the_start_would_flatter_the_cohort(
    tables: dict[str, pd.DataFrame],
) -> None:
    """Those who died before they could join are in nobody's data, so ignoring entry overstates survival."""
    data = seed("aids_cohort")
    naive = KaplanMeierFitter().fit(data.duration, data.event)
    rows = tables["reference_aids_cohort_curve"]
    rows = rows[rows.duration >= data[data.event == 1].duration.min()]
    assert (naive.survival_function_at_times(rows.duration).to_numpy() > rows.survival + 1e-3).all()


def test_the_grouped_two_sample_estimate_equals_the_one_from_single_items(
    built: Built, tables: dict[str, pd.DataFrame]
) -> None:
    """280 of 1,100 survive the first year and 15 of the remaining 30 of the first sample the second."""
    rows = tables["reference_two_samples_overall_curve"].set_index("duration").sort_index()
    assert rows.at_risk.tolist() == [1100, 1100, 30]
    assert rows.survival.to_numpy() == pytest.approx([1, 280 / 1100, 280 / 1100 / 2], rel=1e-12)
    assert built.table("reference_two_samples_spells").weight.sum() == 1100


# The seeds against their carriers


def rows_of(frame: pd.DataFrame) -> Counter[tuple[object, ...]]:
    return Counter(map(tuple, frame.to_numpy().tolist()))


def test_remission_is_the_copy_in_lifelines() -> None:
    copy = lifelines.datasets.load_leukemia()
    copy["arm"] = copy.Rx.map({0: "6-MP", 1: "placebo"})
    ours = seed("remission")
    assert rows_of(ours[["arm", "duration", "event"]]) == rows_of(copy[["arm", "t", "status"]])
    assert set(Counter(zip(ours.pair, ours.arm, strict=True)).values()) == {1}


def test_lung_cancer_is_the_copy_in_lifelines() -> None:
    copy = lifelines.datasets.load_lung()
    copy["sex"] = copy.sex.map({1: "male", 2: "female"})
    assert rows_of(seed("lung_cancer")[["sex", "duration", "event"]]) == rows_of(
        copy[["sex", "time", "status"]]
    )


def test_fly_lifetimes_are_the_copy_in_lifelines() -> None:
    copy = lifelines.datasets.load_waltons()
    assert rows_of(seed("fly_lifetimes")[["strain", "duration", "event"]]) == rows_of(
        copy[["group", "T", "E"]]
    )


def test_the_aids_cohort_is_the_copy_in_lifelines() -> None:
    copy = lifelines.datasets.load_multicenter_aids_cohort_study()
    thousandths = (copy[["W", "T"]] * 1000).round().astype(int).assign(event=copy.D)
    assert rows_of(seed("aids_cohort")[["entry", "duration", "event"]]) == rows_of(thousandths)
