"""An analytics repo that depends on the package, as a user's would: installed, built and read on DuckDB."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import duckdb
import lifelines
import numpy as np
import pandas as pd
import pytest
from dbt.cli.main import dbtRunner, dbtRunnerResult
from dbt_common.events.base_types import EventMsg

PACKAGE = Path(__file__).resolve().parents[1]
PROJECT = PACKAGE / "tests" / "consumer"
NAME = "harrow_lane_analytics"
AS_OF = pd.Timestamp("2024-07-01")
OBSERVED_FROM = pd.Timestamp("2020-01-01")
MADE_BY_RUNS = ("target", "dbt_packages", "logs", "package-lock.yml", "*.duckdb", ".user.yml")
GRACE = pd.Timedelta(days=14)
NEVER = pd.Timestamp("2200-01-01")


@dataclass(frozen=True)
class Consumer:
    """A copy of the analytics repo in a folder of its own, with its database beside it."""

    folder: Path

    def dbt(self, *arguments: str, on_event: Callable[[EventMsg], object] | None = None) -> dbtRunnerResult:
        place = ["--project-dir", str(self.folder), "--profiles-dir", str(self.folder)]
        return dbtRunner(callbacks=[on_event] if on_event else []).invoke(["--quiet", *arguments, *place])

    def build(self, *arguments: str) -> None:
        result = self.dbt("build", *arguments)
        assert result.success, failures(result)

    def manifest(self) -> dict:
        return json.loads((self.folder / "target" / "manifest.json").read_text())

    def table(self, name: str) -> pd.DataFrame:
        with duckdb.connect(str(self.folder / "harrow_lane.duckdb")) as connection:
            return connection.sql(f"select * from analytics.{name}").df()

    def write(self, path: str, text: str) -> None:
        (self.folder / path).parent.mkdir(parents=True, exist_ok=True)
        (self.folder / path).write_text(text)


def failures(result: dbtRunnerResult) -> str:
    nodes = getattr(result.result, "results", None) or []
    failed = [node for node in nodes if node.status not in ("success", "pass")]
    said = [f"{node.node.unique_id}: {node.message}" for node in failed]
    return "\n".join([*said, str(result.exception or "")])


def copied_to(folder: Path, monkeypatch: pytest.MonkeyPatch) -> Consumer:
    """Copy the repo, point its `local:` dependency at the package, and install it."""
    shutil.copytree(PROJECT, folder, ignore=shutil.ignore_patterns(*MADE_BY_RUNS))
    dependencies = (folder / "packages.yml").read_text()
    assert "local: ../.." in dependencies
    (folder / "packages.yml").write_text(dependencies.replace("local: ../..", f"local: {PACKAGE}"))
    monkeypatch.setenv("DBT_SEND_ANONYMOUS_USAGE_STATS", "false")
    monkeypatch.setenv("HARROW_LANE_DATABASE", str(folder / "harrow_lane.duckdb"))
    consumer = Consumer(folder)
    assert consumer.dbt("deps").success
    return consumer


@pytest.fixture(scope="module")
def built(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Consumer]:
    with pytest.MonkeyPatch.context() as monkeypatch:
        consumer = copied_to(tmp_path_factory.mktemp("built") / "repo", monkeypatch)
        consumer.build()
        yield consumer


@pytest.fixture
def fresh(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Consumer:
    return copied_to(tmp_path / "repo", monkeypatch)


# What the dependency adds to a run


def test_the_dependency_adds_only_macros(built: Consumer) -> None:
    manifest = built.manifest()
    for part in ("nodes", "sources", "exposures", "metrics", "unit_tests", "semantic_models"):
        owners = {node["package_name"] for node in manifest.get(part, {}).values()}
        assert owners <= {NAME}, f"{part} of {owners}"
    assert any(macro["package_name"] == "spellcurve" for macro in manifest["macros"].values())


def test_the_dependency_adds_no_warning(fresh: Consumer) -> None:
    warnings = []

    def keep(event: EventMsg) -> None:
        if event.info.level == "warn":
            warnings.append(event.info.msg)

    result = fresh.dbt("parse", on_event=keep)
    assert result.success
    assert warnings == []


def test_a_listing_shows_the_users_own_things_alone(built: Consumer) -> None:
    result = built.dbt("ls", "--resource-type", "all")
    assert result.success
    assert result.result
    assert [name for name in result.result if "spellcurve" in name.split(".")[0]] == []
    assert built.dbt("ls", "--select", "package:spellcurve").result == []


def test_the_database_holds_the_users_own_tables_alone(built: Consumer) -> None:
    with duckdb.connect(str(built.folder / "harrow_lane.duckdb")) as connection:
        made = connection.sql(
            "select table_schema, table_name, table_type from information_schema.tables"
        ).fetchall()
    assert sorted(made) == [
        ("analytics", "lapse_causes", "BASE TABLE"),
        ("analytics", "machine_curve", "VIEW"),
        ("analytics", "membership_curve", "BASE TABLE"),
        ("analytics", "membership_faults", "BASE TABLE"),
        ("analytics", "membership_spells", "BASE TABLE"),
        ("analytics", "memberships", "BASE TABLE"),
        ("analytics", "returning_member_curve", "BASE TABLE"),
        ("analytics", "workshop_machines", "BASE TABLE"),
    ]


# Figures


def spells_by_hand(memberships: pd.DataFrame) -> pd.DataFrame:
    """The membership spells by the working contract's rules, one subject at a time, in plain Python."""
    spells = []
    sound = memberships.dropna(subset=["member_id", "joined_on"]).copy()
    sound["ended"] = pd.to_datetime(sound["left_on"], errors="coerce")
    for member, rows in sound.groupby("member_id"):
        stretches: list[list] = []
        for row in rows.sort_values("joined_on").itertuples():
            unreadable = pd.isna(row.ended) and not pd.isna(row.left_on)
            if unreadable or row.ended < row.joined_on or row.joined_on > AS_OF:
                continue
            ended = NEVER if pd.isna(row.ended) or row.ended > AS_OF else row.ended
            if stretches and row.joined_on - stretches[-1][1] <= GRACE:
                stretches[-1][1] = max(ended, stretches[-1][1])
            else:
                stretches.append([row.joined_on, ended, row.plan])
        for started, ended, plan in stretches:
            known_until = AS_OF - GRACE
            event = int(ended <= known_until)
            if started <= known_until and not (event and ended < OBSERVED_FROM):
                spells.append((member, started, ended if event else known_until, event, plan))
    table = pd.DataFrame(spells, columns=["subject_id", "started_at", "last_seen_at", "event", "plan"])
    table["duration"] = (table["last_seen_at"] - table["started_at"]).dt.days
    table["entry"] = (OBSERVED_FROM - table["started_at"]).dt.days.clip(lower=0)
    return table


def reference(spells: pd.DataFrame, confidence: float = 0.95) -> lifelines.KaplanMeierFitter:
    return lifelines.KaplanMeierFitter(alpha=1 - confidence).fit(
        spells["duration"], spells["event"], entry=spells["entry"], weights=spells["weight"]
    )


def groups(curve: pd.DataFrame, spells: pd.DataFrame, by: str) -> Iterator[tuple[pd.DataFrame, pd.DataFrame]]:
    """Each group's curve beside its spells; a null value is a group of its own."""
    names = set(spells[by].dropna()) | ({None} if spells[by].isna().any() else set())
    shown = set(curve[by].dropna()) | ({None} if curve[by].isna().any() else set())
    assert names == shown
    for name in names:
        in_group = [table[by].isna() if name is None else table[by] == name for table in (curve, spells)]
        yield curve[in_group[0]].sort_values("duration"), spells[in_group[1]]


def test_the_spells_are_those_that_the_rules_give(built: Consumer) -> None:
    columns = ["subject_id", "started_at", "last_seen_at", "entry", "duration", "event", "plan"]
    order = ["subject_id", "started_at"]
    found = built.table("membership_spells").sort_values(order)[columns].reset_index(drop=True)
    expected = spells_by_hand(built.table("memberships")).sort_values(order)[columns].reset_index(drop=True)
    assert len(expected) > 50
    pd.testing.assert_frame_equal(
        found.astype({"started_at": "datetime64[us]", "last_seen_at": "datetime64[us]"}),
        expected.astype({"started_at": "datetime64[us]", "last_seen_at": "datetime64[us]"}),
        check_dtype=False,
    )


def test_each_bad_row_is_kept_with_its_fault(built: Consumer) -> None:
    faults = built.table("membership_faults")
    stated = faults.set_index("subject_id")["fault"].to_dict()
    assert stated["M091"] == "no_start"
    assert stated["M092"] == "ends_before_start"
    assert stated["M093"] == "unreadable_end"
    assert stated["M094"] == "starts_after_as_of"
    assert (faults["fault"] == "no_subject").sum() == 1
    in_spells = built.table("membership_spells")["source_rows"].sum()
    assert in_spells + len(faults) == len(built.table("memberships"))


def test_the_membership_curve_agrees_with_the_reference_estimator(built: Consumer) -> None:
    curve, spells = built.table("membership_curve"), built.table("membership_spells")
    assert (spells["entry"] > 0).any(), "the data no longer has late entry"
    for part, of in groups(curve, spells, "plan"):
        of = of[of["duration"] > of["entry"]]
        fit = reference(of)
        survival = fit.survival_function_at_times(part["duration"]).to_numpy()
        np.testing.assert_allclose(part["survival"], survival, rtol=1e-9, atol=1e-12)
        at_risk = [
            ((of["entry"] < t) & (t <= of["duration"])).sum() if t else (of["entry"] == 0).sum()
            for t in part["duration"]
        ]
        assert part["at_risk"].tolist() == at_risk


def test_the_causes_and_the_curve_add_up(built: Consumer) -> None:
    causes, curve = built.table("lapse_causes"), built.table("membership_curve")
    ended = built.table("membership_spells").query("event == 1 and duration > entry")
    assert causes.groupby("cause")["events"].sum().to_dict() == ended["cause"].value_counts().to_dict()
    together = causes.groupby(["plan", "duration"], dropna=False, as_index=False)["incidence"].sum()
    both = together.merge(curve, on=["plan", "duration"])
    assert len(both) == len(together) == len(curve) > 50
    np.testing.assert_allclose(both["incidence"] + both["survival"], 1, rtol=1e-9)


def test_a_curve_of_a_cte_reads_only_its_rows(built: Consumer) -> None:
    spells = built.table("membership_spells").query("spell_number > 1 and duration > entry")
    assert len(spells) > 5
    curve = built.table("returning_member_curve").sort_values("duration")
    survival = reference(spells).survival_function_at_times(curve["duration"]).to_numpy()
    np.testing.assert_allclose(curve["survival"], survival, rtol=1e-9, atol=1e-12)
    assert curve["events"].sum() == spells["event"].sum()


def test_a_view_on_an_ephemeral_spell_model_agrees_with_the_reference_estimator(built: Consumer) -> None:
    machines = built.table("workshop_machines").rename(
        columns={"hours": "duration", "worn_out": "event", "machines": "weight"}
    )
    machines["entry"] = 0
    for part, of in groups(built.table("machine_curve"), machines, "kind"):
        assert part["duration"].tolist() == list(range(min(80, of["duration"].max()) + 1))
        fit = reference(of, confidence=0.9)
        survival = fit.survival_function_at_times(part["duration"]).to_numpy()
        np.testing.assert_allclose(part["survival"], survival, rtol=1e-9, atol=1e-12)
        bounds = fit.confidence_interval_.reindex(part["duration"], method="ffill").to_numpy()
        ours = part[["survival_lower", "survival_upper"]].to_numpy(dtype=float)
        between = part["survival"].between(0, 1, inclusive="neither").to_numpy()
        assert between.sum() > 10
        np.testing.assert_allclose(ours[between], bounds[between], rtol=1e-9)


# What the user can do wrong, and differently


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (
            "survival_curve(ref('membership_spells'), interval_scale='sideways')",
            ["interval_scale", "'sideways'", "'log-log'", "arcsine"],
        ),
        ("survival_curve(ref('membership_spells'), colour='red')", ["colour", "confidence"]),
        ("survival_curve(ref('membership_spells'), confidence=95)", ["confidence", "95", "between 0 and 1"]),
        ("survival_curve()", ["spells", "missing"]),
        ("spells_from_durations(ref('workshop_machines'), event='worn_out')", ["duration", "missing"]),
    ],
)
def test_a_wrong_call_stops_with_one_sentence_that_names_the_model(
    fresh: Consumer, call: str, words: list[str]
) -> None:
    fresh.write("models/members/mistaken_curve.sql", "{{ spellcurve." + call + " }}\n")
    result = fresh.dbt("compile", "--no-introspect", "--select", "mistaken_curve")
    assert not result.success
    said = str(result.exception) if result.exception else failures(result)
    for word in [*words, "mistaken_curve", "spellcurve." + call.split("(")[0]]:
        assert word in said, said


def test_a_user_can_put_an_own_macro_in_a_macros_place(fresh: Consumer) -> None:
    """The consumer's dispatch order puts its macros first; its version wraps the package's."""
    project = (fresh.folder / "dbt_project.yml").read_text()
    order = f"dispatch:\n  - macro_namespace: spellcurve\n    search_order: [{NAME}, spellcurve]\n"
    fresh.write("dbt_project.yml", project + "\n" + order)
    fresh.write(
        "macros/own_survival_curve.sql",
        "{% macro default__survival_curve() %}\n"
        "select own.duration, own.survival, 'house rule' as made_by\n"
        "from ({{ spellcurve.default__survival_curve(*varargs, **kwargs) }}) as own\n"
        "{% endmacro %}\n",
    )
    fresh.write("models/members/own_curve.sql", "{{ spellcurve.survival_curve(ref('membership_spells')) }}\n")
    wanted = ("memberships", "membership_spells", "own_curve")
    fresh.build("--select", *wanted, "--exclude-resource-type", "test")
    curve = fresh.table("own_curve").sort_values("duration")
    assert set(curve["made_by"]) == {"house rule"}
    spells = fresh.table("membership_spells").query("duration > entry")
    survival = reference(spells).survival_function_at_times(curve["duration"]).to_numpy()
    np.testing.assert_allclose(curve["survival"], survival, rtol=1e-9, atol=1e-12)


def test_a_user_can_turn_on_the_models_and_seeds_that_come_with_the_package(fresh: Consumer) -> None:
    shipped = [
        path.relative_to(PACKAGE)
        for kind, suffix in (("models", "sql"), ("seeds", "csv"))
        for path in (PACKAGE / kind).rglob(f"*.{suffix}")
    ]
    assert shipped, "the package has neither models nor seeds"
    parts = sorted({path.parts[1] for path in shipped})
    turned_on = "".join(f"    {part}:\n      +enabled: true\n" for part in parts)
    project = (fresh.folder / "dbt_project.yml").read_text()
    for kind in ("models", "seeds"):
        project = project.replace(f"\n{kind}:\n", f"\n{kind}:\n  spellcurve:\n{turned_on}")
    fresh.write("dbt_project.yml", project)
    listed = fresh.dbt("ls", "--resource-type", "model", "--resource-type", "seed").result
    ours = {tuple(name.split(".")[1:]) for name in listed if name.startswith("spellcurve.")}
    assert ours == {(*path.parts[1:-1], path.stem) for path in shipped}
