"""`spellcurve qualify`: certificates on real engines, cleaning up, and what it says of what is wrong."""

from __future__ import annotations

import json
import os
import re
import signal
import threading
from pathlib import Path

import duckdb
import pytest
import spellcurve
from harness import ROOT, Engine
from spellcurve import package as package_module
from spellcurve import qualification
from spellcurve.cli import app
from spellcurve.package import find_package
from test_projects_on_engines import KeptDuckDB
from test_published import copied_to, published
from typer.testing import CliRunner

MODELS = {path.stem for path in (ROOT / "models" / "reference").glob("*.sql")}
COMPARED = MODELS - set(qualification.SUMMARIES)


@pytest.fixture(autouse=True)
def _wide_and_quiet(monkeypatch):
    monkeypatch.setenv("COLUMNS", "200")
    monkeypatch.setenv("DBT_SEND_ANONYMOUS_USAGE_STATS", "false")


@pytest.fixture(scope="module")
def warehouse(each_engine, tmp_path_factory) -> Engine:
    """Every engine, with tables that last: DuckDB in a file."""
    return KeptDuckDB(tmp_path_factory.mktemp("kept")) if each_engine.name == "duckdb" else each_engine


def run(*arguments: str | Path):
    done = CliRunner().invoke(app, ["qualify", *map(str, arguments)])
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done


def schemas(engine: Engine) -> set[str]:
    sql = "select schema_name from information_schema.schemata"
    rows = engine.query("show schemas" if engine.name == "spark" else sql)
    return {str(value) for row in rows for value in row.values()}


def duckdb_schemas(database: Path) -> set[str]:
    with duckdb.connect(str(database)) as connection:
        return {name for (name,) in connection.sql("select schema_name from duckdb_schemas()").fetchall()}


def duckdb_tables(database: Path) -> set[tuple[str, str]]:
    with duckdb.connect(str(database)) as connection:
        return set(connection.sql("select schema_name, table_name from duckdb_tables()").fetchall())


# Every engine


def test_an_engine_is_qualified_and_left_as_it_was(warehouse, tmp_path):
    """The profile is the user's: named by the project, with profiles.yml where --profiles-dir says."""
    project = tmp_path / "project"
    project.mkdir()
    (project / "dbt_project.yml").write_text("name: harrow_lane\nprofile: spellcurve\n")
    before = schemas(warehouse)
    done = run("--project-dir", project, "--profiles-dir", warehouse.scratch, "-o", tmp_path / "certificates")
    assert done.exit_code == 0, done.output
    assert schemas(warehouse) == before
    assert "Agreement" in done.output and "✗" not in done.output

    markdown, data = sorted((tmp_path / "certificates").iterdir(), key=lambda path: path.suffix != ".md")
    content = json.loads(data.read_text(encoding="utf-8"))
    assert content["verdict"] == "agreement" and content["dbt_tests"]["failed"] == []
    there = content["environment"]
    assert there["adapter"] == there["target"] == warehouse.name
    [version] = warehouse.query("select version() as version")
    assert there["engine_version"] == " ".join(version["version"].split())
    assert there["package_version"] == there["validator_version"] == spellcurve.__version__
    assert markdown.name == f"spellcurve-{warehouse.name}-{content['moment'][:10]}.md"

    rows = published()
    assert len(content["figures"]) == len(rows)
    for figure, row in zip(content["figures"], rows, strict=True):
        assert figure["verdict"] == "agrees"
        assert figure["printed"] == (row["printed_value"] or None)
        assert figure["from_memory"] == (row["from_memory"] == "yes") and figure["source"] == row["source"]
        if figure["printed"] is None:
            assert figure["computed"] is None
        else:
            allowed = 0.5 * 10 ** -figure["decimals"] + 1e-9
            assert abs(figure["computed"] - float(figure["printed"])) <= allowed
    assert {one["model"] for one in content["exact_fractions"]} == COMPARED
    for one in content["exact_fractions"]:
        assert one["verdict"] == "agrees" and one["rows"] > 0 and one["figures"] > 0, one
        assert one["largest_difference"] <= 1e-10, one

    page = markdown.read_text(encoding="utf-8")
    assert page.startswith(f"# Spellcurve on {warehouse.name}: agreement\n")
    for source in content["sources"]:
        assert source["citation"] in page
    assert "| 6-MP | survival | 10 | .753 | 0.752941 | agrees | memory | Freireich et al. 1963" in page
    assert "This says nothing of other data" in page
    assert not re.search("disagree|not found", page, re.I)

    if warehouse.name == "postgres":
        given, told = warehouse.output(), done.output + page + data.read_text(encoding="utf-8")
        for secret in (given["host"], given["password"]):
            place = told.find(secret)
            assert place < 0 or secret == "none", told[max(0, place - 100) : place + 100]


# Cleaning up


@pytest.fixture(scope="module")
def package(tmp_path_factory) -> Path:
    """A copy of the package, and profiles.yml with a DuckDB file beside it."""
    return copied_to(tmp_path_factory.mktemp("copy") / "package").folder


def options(package: Path) -> list[str | Path]:
    return ["--profile", "spellcurve", "--profiles-dir", package, "--package", package]


def test_keep_leaves_the_scratch_schema_and_nothing_else_is_written(package, tmp_path, monkeypatch):
    monkeypatch.setenv("DBT_STORE_FAILURES", "true")  # dbt would write to a schema of its own
    monkeypatch.setenv("DBT_ENGINE_WARN_ERROR", "true")
    database = package / "published.duckdb"
    with duckdb.connect(str(database)) as connection:
        connection.execute("create schema reference; create table reference.reference_remission (mine int)")
    done = run(*options(package), "--keep", "-o", tmp_path)
    assert done.exit_code == 0, done.output
    tables = duckdb_tables(database) - {("reference", "reference_remission")}
    [schema] = {name for name, _ in tables}
    assert re.fullmatch("reference_spellcurve_[0-9a-f]{8}", schema) and schema in done.output
    assert {table for _, table in tables} >= MODELS
    with duckdb.connect(str(database)) as connection:
        assert connection.sql("from reference.reference_remission").columns == ["mine"]
        connection.execute(f"drop schema {schema} cascade; drop schema reference cascade")
    assert duckdb_schemas(database) == {"information_schema", "main", "pg_catalog"}
    assert os.environ["DBT_STORE_FAILURES"] == "true"


def test_a_schema_that_is_there_already_is_not_touched(package, tmp_path, monkeypatch):
    database = package / "published.duckdb"
    monkeypatch.setattr(qualification.secrets, "token_hex", lambda size: "taken")
    with duckdb.connect(str(database)) as connection:
        connection.execute("create schema reference_spellcurve_taken")
        connection.execute("create table reference_spellcurve_taken.mine as select 1 as one")
    done = run(*options(package), "-o", tmp_path)
    assert done.exit_code == 2
    sentence = "The scratch schema reference_spellcurve_taken is there already; run this again."
    assert sentence in done.output and not list(tmp_path.iterdir())
    assert duckdb_tables(database) == {("reference_spellcurve_taken", "mine")}
    with duckdb.connect(str(database)) as connection:
        connection.execute("drop schema reference_spellcurve_taken cascade")


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM], ids=["ctrl-c", "end"])
@pytest.mark.parametrize("place", [1, 2], ids=["loading", "building"])
def test_an_interruption_cleans_up(package, number, place):
    before = duckdb_schemas(package / "published.duckdb")
    timer = threading.Timer(0.3, lambda: os.kill(os.getpid(), number))

    def announce(doing: str, done: int, of: int) -> None:
        if done == place:
            timer.start()

    handlers = [signal.getsignal(one) for one in (signal.SIGINT, signal.SIGTERM)]
    with pytest.raises(KeyboardInterrupt, match=r"reference_spellcurve_[0-9a-f]+ was dropped"):
        spellcurve.qualify(profile="spellcurve", profiles_dir=package, package=package, announce=announce)
    timer.cancel()
    assert duckdb_schemas(package / "published.duckdb") == before
    assert [signal.getsignal(one) for one in (signal.SIGINT, signal.SIGTERM)] == handlers


@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")
@pytest.mark.parametrize("place", [1, 4], ids=["early", "late"])
def test_an_interruption_that_python_loses_counts_too(package, place):
    class Interrupting:
        def __del__(self) -> None:
            signal.raise_signal(signal.SIGTERM)

    def announce(doing: str, done: int, of: int) -> None:
        if done == place:
            Interrupting()

    before = duckdb_schemas(package / "published.duckdb")
    with pytest.raises(KeyboardInterrupt, match=r"reference_spellcurve_[0-9a-f]+ was dropped"):
        spellcurve.qualify(profile="spellcurve", profiles_dir=package, package=package, announce=announce)
    assert duckdb_schemas(package / "published.duckdb") == before


def test_a_model_that_cannot_be_built_is_named_and_cleaned_up_after(tmp_path):
    package = copied_to(tmp_path / "package").folder
    model = package / "models" / "reference" / "reference_remission_curve.sql"
    model.write_text(model.read_text() + "\norder by no_such_column\n")
    done = run(*options(package), "-o", tmp_path / "certificates")
    assert done.exit_code == 2
    assert "Could not run: reference_remission_curve could not be built: " in done.output
    assert "no_such_column" in done.output and done.output.count("\n") <= 2
    assert not (tmp_path / "certificates").exists()
    assert not {one for one in duckdb_schemas(package / "published.duckdb") if "spellcurve" in one}


def test_a_name_that_a_warehouse_would_cut_short_is_refused(package, tmp_path):
    profile = (package / "profiles.yml").read_text().replace("schema: reference", f"schema: {'r' * 60}")
    (tmp_path / "profiles.yml").write_text(profile)
    done = run("--profile", "spellcurve", "--profiles-dir", tmp_path, "--package", package, "-o", tmp_path)
    assert done.exit_code == 2 and "use a target with a shorter schema." in done.output
    assert not {one for one in duckdb_schemas(package / "published.duckdb") if "rrr" in one}


def test_a_schema_is_dropped_also_where_dbt_was_left_without_an_adapter(package):
    """As after an interruption while dbt makes a new one."""
    from dbt.adapters.factory import FACTORY

    def announce(doing: str, done: int, of: int) -> None:
        if done == 2:
            FACTORY.reset_adapters()
            raise RuntimeError("in between")

    with pytest.raises(RuntimeError, match="in between"):
        spellcurve.qualify(profile="spellcurve", profiles_dir=package, package=package, announce=announce)
    assert not {one for one in duckdb_schemas(package / "published.duckdb") if "spellcurve" in one}


# What is wrong


def altered(package: Path, path: str, old: str, new: str) -> None:
    text = (package / path).read_text(encoding="utf-8")
    assert text.count(old) == 1, f"{old!r} is {text.count(old)} times in {path}"
    (package / path).write_text(text.replace(old, new), encoding="utf-8")


FIGURES = "seeds/reference/reference_published_figures.csv"
WRONG = [
    (
        FIGURES,
        "remission,6-MP,survival,10,.753,3",
        "remission,6-MP,survival,10,.754,3",
        r"survival of remission, 6-MP, at 10 is 0\.7529\d+, and \.754 was printed\.",
    ),
    (
        "macros/estimates/actuarial_table.sql",
        "censored / 2",
        "censored",
        r"exposed of kidney_cancer, at 0 is 107, and 116\.5 was printed\.",
    ),
    (
        "seeds/reference/reference_valve_seat_replacements.csv",
        "\n327,98\n",
        "\n327,99\n",
        r"mean_count of valve_seats, at 98 was not found in the warehouse; \.146 was printed\.",
    ),
]


@pytest.mark.parametrize(("path", "old", "new", "sentence"), WRONG, ids=["figure", "macro", "observation"])
def test_what_is_wrong_is_named_and_certified(tmp_path, path, old, new, sentence):
    package = copied_to(tmp_path / "package").folder
    altered(package, path, old, new)
    done = run(*options(package), "-o", tmp_path / "certificates")
    assert done.exit_code == 1, done.output
    assert re.search(sentence, done.output), done.output
    assert "✗ Disagreement: " in done.output
    assert not {one for one in duckdb_schemas(package / "published.duckdb") if "spellcurve" in one}
    [page] = (tmp_path / "certificates").glob("*.md")
    text = page.read_text(encoding="utf-8")
    assert text.startswith("# Spellcurve on duckdb: DISAGREEMENT\n")
    assert re.search(sentence, text) and "Do not rely on figures" in text
    [data] = (tmp_path / "certificates").glob("*.json")
    assert json.loads(data.read_text(encoding="utf-8"))["verdict"] == "disagreement"


def test_a_defect_that_no_printed_figure_shows_is_found_in_exact_fractions(tmp_path):
    """Half a millionth of a share is no printed digit."""
    package = copied_to(tmp_path / "package").folder
    model = package / "models" / "reference" / "reference_melanoma_incidence.sql"
    call = model.read_text()
    columns = (
        "cause, duration, at_risk, events, incidence + 0.0000001 as incidence, std_error, incidence_lower, "
        "incidence_upper"
    )
    model.write_text(f"with found as (\n{call})\nselect {columns}\nfrom found\n")
    done = run(*options(package), "-o", tmp_path / "certificates")
    assert done.exit_code == 1, done.output
    assert "reference_melanoma_incidence: incidence at cause melanoma, duration 0 is 1e-07" in done.output
    assert "293 of 293 printed figures, 42 of 43 tables" in done.output


# Bad calls


def test_a_call_that_cannot_run_says_why_in_one_sentence(package, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "nameless").mkdir()
    (tmp_path / "nameless" / "dbt_project.yml").write_text("name: nameless\n")
    profile = ["--profile", "spellcurve", "--profiles-dir", package]
    calls = {
        ("--profiles-dir", package): "There is no dbt_project.yml in ",
        (
            "--project-dir",
            tmp_path / "nameless",
        ): "names no profile that can be read; give one with --profile.",
        ("--profile", "nobody", "--profiles-dir", package): "nobody",
        (*profile, "--target", "nowhere"): "nowhere",
        (*profile, "--package", tmp_path): "give a folder with the whole package.",
    }
    for arguments, sentence in calls.items():
        done = run(*arguments)
        assert done.exit_code == 2, done.output
        said = done.output.strip()
        assert said.startswith("Could not run: ") and sentence in said, said
        assert "\n" not in said and "Traceback" not in said, said
    assert {path.name for path in tmp_path.iterdir()} == {"nameless"}


def test_a_certificate_that_cannot_be_written_is_said(package, tmp_path):
    (tmp_path / "file").write_text("in the way")
    done = run(*options(package), "-o", tmp_path / "file")
    assert done.exit_code == 2
    assert f"The certificate cannot be written to {tmp_path / 'file'}" in done.output


# Parts


@pytest.mark.parametrize(
    ("computed", "printed", "decimals", "agrees"),
    [
        (0.7525, ".753", 3, True),
        (0.75249, ".753", 3, False),
        (0.7535, ".753", 3, True),
        (0.75351, ".753", 3, False),
        (23, "23", 0, True),
        (24, "23", 0, False),
        (None, None, 0, True),
        (None, "23", 0, False),
        (23, None, 0, False),
        (float("nan"), ".5", 1, False),
        (float("inf"), ".5", 1, False),
    ],
)
def test_a_figure_agrees_if_it_rounds_to_the_printed_one(computed, printed, decimals, agrees):
    assert qualification._rounds_to(computed, printed, decimals) is agrees


def test_a_row_that_is_doubled_or_unheard_of_in_the_warehouse_disagrees():
    printed = {
        "data_set": "remission",
        "group_value": "6-MP",
        "figure": "survival",
        "duration": "10",
        "printed_value": ".753",
        "printed_decimals": "3",
        "source": "s",
        "from_memory": "yes",
    }
    found = printed | {
        "duration": 10,
        "printed_value": 0.753,
        "printed_decimals": 3,
        "computed_value": 0.7529,
        "verdict": "agrees",
    }

    def verdicts(*rows: dict) -> list[str]:
        return [one.verdict for one in qualification._figures([printed], list(rows))]

    assert verdicts(found) == ["agrees"]
    assert verdicts(found, found) == ["disagrees"]
    assert verdicts() == ["not found"]
    assert verdicts(found | {"verdict": "disagrees"}) == ["disagrees"]
    assert verdicts(found | {"computed_value": 0.7539}) == ["disagrees"]
    assert verdicts(found, found | {"duration": 11}) == ["agrees", "disagrees"]


def test_the_package_is_found_in_the_checkout_or_beside_the_code_or_reported_missing(tmp_path, monkeypatch):
    assert find_package() == ROOT
    monkeypatch.setattr(package_module, "__file__", str(tmp_path / "a" / "b" / "package.py"))
    with pytest.raises(FileNotFoundError, match="install the spellcurve package again"):
        find_package()
    beside = tmp_path / "a" / "b" / "dbt_package"
    beside.mkdir(parents=True)
    (beside / "dbt_project.yml").write_text("name: spellcurve\n")
    assert find_package() == beside
