"""What README.md tells a user to write builds and passes, in the analytics repo of tests/consumer."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
import yaml
from test_consumer import Consumer, copied_to

README = Path(__file__).resolve().parents[1] / "README.md"
BLOCK = re.compile(r"^ *```(\w+)\n(.*?)^ *```$", re.M | re.S)
LINK = re.compile(r"\]\((?!#)([^)]+)\)")


def blocks(language: str) -> list[str]:
    return [text for kind, text in BLOCK.findall(README.read_text()) if kind == language]


@pytest.fixture
def project(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Consumer:
    return copied_to(tmp_path / "repo", monkeypatch)


def test_the_models_and_tests_shown_build_and_pass(project: Consumer) -> None:
    spells, curve = blocks("sql")
    packages, properties = (yaml.safe_load(text) for text in blocks("yaml"))
    assert set(packages) == {"packages"}
    faulty = spells.replace("source_rows=true", "rows='faulty'")
    assert faulty != spells
    models = {"member_spells": spells, "member_survival": curve, "member_spells_faulty": faulty}
    for name, sql in models.items():
        project.write(f"models/members/{name}.sql", sql)
    project.write("models/members/readme.yml", yaml.safe_dump(properties))
    wanted = ("memberships", "stg_memberships", *models)
    result = project.dbt("build", "--indirect-selection", "buildable", "--select", *wanted)
    assert result.success, [(one.node.name, one.message) for one in result.result.results]
    tests = [one for one in result.result.results if one.node.resource_type == "test"]
    assert len(tests) == 4
    assert len(project.table("member_survival")) > 50
    assert len(project.table("member_spells_faulty")) > 3


def test_every_page_that_the_documents_point_to_is_there() -> None:
    pages = [README, *(README.parent / "docs").glob("*.md")]
    for page in pages:
        for target in LINK.findall(page.read_text()):
            assert (page.parent / target.split("#")[0]).exists(), f"{page.name} points to {target}"
