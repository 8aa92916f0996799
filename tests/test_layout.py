"""The house rules for files, macros and SQL that can be read off the source without running it."""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import pytest
import yaml

ROOT = Path(__file__).resolve().parents[1]
MACROS = ROOT / "macros"
MODELS = ("models", "tests/consumer/models")
PACKAGE = "spellcurve"
LONGEST_LINE = 160
ENGINES = (
    "athena",
    "bigquery",
    "clickhouse",
    "databricks",
    "duckdb",
    "postgres",
    "redshift",
    "snowflake",
    "spark",
    "trino",
)

DEFINITION = re.compile(r"{%-?\s*(macro|test)\s+(\w+)\s*\((.*?)\)\s*-?%}(.*?){%-?\s*end\1\s*-?%}", re.S)
DISPATCH = re.compile(rf"adapter\.dispatch\(\s*['\"](\w+)['\"]\s*,\s*['\"]{PACKAGE}['\"]\s*\)")
IMPLEMENTATION = re.compile(rf"^(?:default|{'|'.join(ENGINES)})__")
JINJA_COMMENT = re.compile(r"{#.*?#}", re.S)
SQL_COMMENT = re.compile(r"--[^\n]*")

# What some warehouses lack; macros/dialect/ alone may use these, for the engines that have them.
NOT_EVERYWHERE = {
    "qualify": r"\bqualify\b(?!')",
    "filter (where …)": r"\bfilter\s*\(\s*where\b",
    "generate_series": r"\bgenerate_series\b",
    "lateral join": r"\blateral\b(?!')",
    "named window": r"\bwindow\s+\w+\s+as\s*\(|\bover\s+(?!\()\w+\s*(?:$|[,\n)])",
    "values list": r"\bvalues\s*\(",
    "boolean aggregate": r"\bbool_(?:and|or)\s*\(",
    "double colon cast": r"\w::\w",
}
KEYWORDS = re.compile(
    r"\b(?:SELECT|FROM|WHERE|WITH|JOIN|GROUP BY|ORDER BY|PARTITION BY|HAVING|UNION ALL|CASE|WHEN|THEN|ELSE"
    r"|COALESCE|CAST|NULL)\b"
)


@dataclass(frozen=True)
class Macro:
    """One macro or generic test as written: its block's kind, name, argument names and body."""

    kind: str
    name: str
    arguments: tuple[str, ...]
    body: str
    path: Path

    @property
    def dispatched_name(self) -> str:
        """The name dbt looks the macro up by; a generic test's carries a prefix."""
        return f"test_{self.name}" if self.kind == "test" else self.name

    @property
    def is_public(self) -> bool:
        return not self.name.startswith("_") and not IMPLEMENTATION.match(self.name)


def argument_names(signature: str) -> tuple[str, ...]:
    """Names of the arguments in a macro's signature, whatever commas their default values hold."""
    names, depth, start = [], 0, 0
    for position, character in enumerate(signature + ","):
        depth += (character in "([{") - (character in ")]}")
        if character == "," and depth == 0:
            names.append(signature[start:position].split("=")[0].strip())
            start = position + 1
    return tuple(name for name in names if name)


def macro_files() -> list[Path]:
    return sorted(MACROS.rglob("*.sql"))


def model_files() -> list[Path]:
    return [path for top in MODELS for path in sorted((ROOT / top).rglob("*.sql"))]


def is_dialect(path: Path) -> bool:
    return "dialect" in path.relative_to(MACROS).parts


def relative(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


@cache
def macros_in(path: Path) -> tuple[Macro, ...]:
    source = JINJA_COMMENT.sub("", path.read_text())
    return tuple(
        Macro(kind, name, argument_names(signature), body, path)
        for kind, name, signature, body in DEFINITION.findall(source)
    )


def public_macros() -> list[Macro]:
    return [macro for path in macro_files() for macro in macros_in(path) if macro.is_public]


def documented_macros(directory: Path) -> dict[str, dict]:
    entries: dict[str, dict] = {}
    for path in sorted(directory.glob("*.yml")):
        for entry in (yaml.safe_load(path.read_text()) or {}).get("macros", []):
            name = entry["name"]
            assert name not in entries, f"{name} is documented twice in {relative(directory)}"
            entries[name] = entry
    return entries


def line_of(text: str, match: re.Match[str]) -> int:
    return text.count("\n", 0, match.start()) + 1


def without_comments(text: str) -> str:
    """The same text with its comments blanked out and its line numbers kept."""
    blank = re.compile(r"[^\n]")
    for comment in (JINJA_COMMENT, SQL_COMMENT):
        text = comment.sub(lambda match: blank.sub(" ", match.group()), text)
    return text


every_macro_file = pytest.mark.parametrize("path", macro_files(), ids=relative)
every_public_macro = pytest.mark.parametrize("macro", public_macros(), ids=lambda macro: macro.name)
portable_macro_files = pytest.mark.parametrize(
    "path", [path for path in macro_files() if not is_dialect(path)], ids=relative
)


def test_there_are_macros_to_look_at() -> None:
    names = {macro.name for macro in public_macros()}
    assert {"survival_curve", "spells_from_intervals"} <= names


def test_no_two_macros_share_a_name() -> None:
    owners: dict[str, Path] = {}
    for path in macro_files():
        for macro in macros_in(path):
            assert macro.dispatched_name not in owners, (
                f"{macro.name} is in {relative(path)} and in {relative(owners[macro.dispatched_name])}"
            )
            owners[macro.dispatched_name] = path


@every_macro_file
def test_every_block_of_a_macro_file_is_a_definition(path: Path) -> None:
    rest = DEFINITION.sub("", JINJA_COMMENT.sub("", path.read_text())).strip()
    assert not rest, f"{relative(path)} holds text outside its macros: {rest[:80]!r}"
    assert macros_in(path), f"{relative(path)} defines nothing"


@every_macro_file
def test_a_file_holds_at_most_one_public_macro_named_as_the_file(path: Path) -> None:
    public = [macro.name for macro in macros_in(path) if macro.is_public]
    assert public in ([], [path.stem])


@every_macro_file
def test_what_dialect_and_support_hold_is_private(path: Path) -> None:
    if path.relative_to(MACROS).parts[0] in ("dialect", "numerics", "support"):
        assert [macro.name for macro in macros_in(path) if macro.is_public] == []


@every_public_macro
def test_a_public_macro_dispatches_to_the_default_beside_it(macro: Macro) -> None:
    beside = {other.name: other for other in macros_in(macro.path)}
    dispatched = DISPATCH.findall(macro.body)
    assert len(dispatched) == 1, f"{macro.name} does not go through adapter.dispatch once"
    implementation = f"default__{dispatched[0]}"
    assert implementation in beside, f"{implementation} is missing from {relative(macro.path)}"
    if macro.kind == "macro":
        assert dispatched[0] == macro.name
        assert beside[implementation].arguments == macro.arguments


@every_public_macro
def test_a_public_macro_is_documented_beside_it(macro: Macro) -> None:
    entry = documented_macros(macro.path.parent).get(macro.dispatched_name)
    assert entry, f"{macro.dispatched_name} has no entry in a .yml of {relative(macro.path.parent)}"
    assert len(entry.get("description", "").split()) >= 10, f"{macro.name} needs a real description"
    arguments = entry.get("arguments", [])
    # The first argument of a generic test is the model that it stands on, which nobody writes out.
    given = macro.arguments[1:] if macro.kind == "test" else macro.arguments
    assert tuple(argument["name"] for argument in arguments if argument["name"] != "model") == given
    for argument in arguments:
        assert argument.get("type"), f"{macro.name}: argument {argument['name']} has no type"
        assert argument.get("description"), f"{macro.name}: argument {argument['name']} has no description"


def test_nothing_is_documented_that_is_not_there() -> None:
    for directory in sorted({path.parent for path in MACROS.rglob("*.yml")}):
        defined = {macro.dispatched_name for path in directory.glob("*.sql") for macro in macros_in(path)}
        assert set(documented_macros(directory)) <= defined, f"in {relative(directory)}"


@portable_macro_files
def test_a_macro_names_no_engine(path: Path) -> None:
    text = path.read_text().lower()
    found = re.search(rf"(?<![a-z])(?:{'|'.join(ENGINES)})(?![a-z])", text)
    assert not found, f"{relative(path)}:{line_of(text, found)} names {found.group()}, not for here"


@portable_macro_files
def test_a_macro_keeps_to_sql_that_every_engine_has(path: Path) -> None:
    text = without_comments(path.read_text())
    for construct, pattern in NOT_EVERYWHERE.items():
        found = re.search(pattern, text, re.I | re.M)
        assert not found, f"{relative(path)}:{line_of(text, found)} uses a {construct}: {found.group()!r}"


@every_macro_file
def test_sql_has_no_trailing_comma(path: Path) -> None:
    # A Jinja block between the comma and what follows may supply the next item, so blocks stand as a mark.
    text = re.sub(
        r"{%.*?%}|{{.*?}}",
        lambda block: "§" + "\n" * block.group().count("\n"),
        without_comments(path.read_text()),
        flags=re.S,
    )
    found = re.search(r",\s*(?:\)|\b(?:from|where|group by|order by)\b)", text)
    assert not found, f"{relative(path)}:{line_of(text, found)} has a trailing comma"


@pytest.mark.parametrize("path", [*macro_files(), *model_files()], ids=relative)
def test_sql_is_written_in_the_house_style(path: Path) -> None:
    text = path.read_text()
    assert "\t" not in text, "indent with four spaces"
    assert text.endswith("\n") and not text.endswith("\n\n"), "end with one line break"
    for number, line in enumerate(text.splitlines(), start=1):
        assert line == line.rstrip(), f"{relative(path)}:{number} ends in blanks"
        assert len(line) <= LONGEST_LINE, f"{relative(path)}:{number} is {len(line)} characters long"
    # Dialects may name types as the warehouse spells them.
    code = "" if path in macro_files() and is_dialect(path) else without_comments(text)
    found = KEYWORDS.search(code)
    assert not found, f"{relative(path)}:{line_of(code, found)} has {found.group()} in capitals"


@pytest.mark.parametrize("path", model_files(), ids=relative)
def test_a_model_names_its_columns(path: Path) -> None:
    assert not re.search(r"\bselect\s+\*", without_comments(path.read_text())), "name the columns"


def test_the_version_is_the_same_everywhere() -> None:
    """Read the four places as text: a working tree need not be installed for this to be checked."""
    project = re.search(r'^version = "(.+)"$', (ROOT / "pyproject.toml").read_text(), re.M)
    module = re.search(
        r'^__version__ = "(.+)"$', (ROOT / "validator" / PACKAGE / "__init__.py").read_text(), re.M
    )
    versions = [macro for path in macro_files() for macro in macros_in(path) if macro.name == "_version"]
    assert project and module and len(versions) == 1
    macro_version = re.search(r"\d+\.\d+\.\d+\w*", versions[0].body)
    assert macro_version
    assert {
        "pyproject.toml": project.group(1),
        "dbt_project.yml": yaml.safe_load((ROOT / "dbt_project.yml").read_text())["version"],
        "validator": module.group(1),
        "_version": macro_version.group(),
    } == dict.fromkeys(("pyproject.toml", "dbt_project.yml", "validator", "_version"), project.group(1))


def test_constraints_pin_names_and_nothing_else() -> None:
    for line in (ROOT / "constraints.txt").read_text().splitlines():
        assert re.fullmatch(r"[A-Za-z0-9._-]+==[A-Za-z0-9.+!]+", line), f"not a plain pin: {line!r}"
