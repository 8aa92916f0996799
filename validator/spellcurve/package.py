"""Finds the package's own dbt project, and reads its reference data."""

from __future__ import annotations

import csv
from pathlib import Path


def find_package() -> Path:
    """The folder of the package's dbt project: beside this module in a wheel, else the checkout's root.

    Raises:
        FileNotFoundError: there is no dbt_project.yml in either place; the message is one sentence.
    """
    here = Path(__file__).resolve()
    for folder in (here.parent / "dbt_package", here.parents[2]):
        if (folder / "dbt_project.yml").is_file():
            return folder
    raise FileNotFoundError(
        f"There is no dbt_project.yml in {here.parent / 'dbt_package'} or {here.parents[2]}; "
        "install the spellcurve package again."
    )


def read_reference(package: Path, name: str) -> list[dict[str, str]]:
    """The rows of one file of seeds/reference as texts; an empty cell is an empty text.

    Args:
        package: folder of the package's dbt project.
        name: of the file, without ``reference_`` and the ending.

    Raises:
        FileNotFoundError: there is no such file; the message is one sentence.
    """
    path = package / "seeds" / "reference" / f"reference_{name}.csv"
    if not path.is_file():
        raise FileNotFoundError(f"There is no {path}; give a folder with the whole package.")
    with path.open(newline="", encoding="utf-8") as lines:
        return list(csv.DictReader(lines))
