"""The command `spellcurve check`: reads options, calls the library, prints and writes what it found."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
from rich.console import Console
from rich.markup import escape
from rich.padding import Padding
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    SpinnerColumn,
    TextColumn,
    TimeElapsedColumn,
)
from rich.table import Table

from spellcurve.compare import TOLERANCE

if TYPE_CHECKING:
    from spellcurve.check import CheckResult

COULD_NOT_RUN = 2
_SHOWN = 5
_STYLES = {
    "agrees": "[green]✓[/]",
    "disagrees": "[red]✗[/]",
    "stale": "[red]✗[/]",
    "not checked": "[yellow]?[/]",
}


def check(
    select: Annotated[
        list[str] | None,
        typer.Option("--select", "-s", metavar="MODELS", help="Which models to check, as dbt selects them."),
    ] = None,
    exclude: Annotated[
        list[str] | None,
        typer.Option(metavar="MODELS", help="Which models to leave out, as dbt selects them."),
    ] = None,
    project_dir: Annotated[
        Path, typer.Option(metavar="PATH", help="Folder of the project's dbt_project.yml.")
    ] = Path(),
    profiles_dir: Annotated[
        Path | None, typer.Option(metavar="PATH", help="Folder of profiles.yml, if dbt would not find it.")
    ] = None,
    profile: Annotated[str | None, typer.Option(metavar="NAME", help="Profile to use, as for dbt.")] = None,
    target: Annotated[
        str | None, typer.Option("--target", "-t", metavar="NAME", help="Target to use, as for dbt.")
    ] = None,
    variables: Annotated[
        str, typer.Option("--vars", metavar="YAML", help="Variables of the project, as for dbt.")
    ] = "{}",
    tolerance: Annotated[
        float,
        typer.Option(
            metavar="SHARE",
            min=0,
            max=0.1,
            help="Largest relative difference that still counts as agreement.",
        ),
    ] = TOLERANCE,
    sample: Annotated[
        int, typer.Option(metavar="NUMBER", min=1, help="How many subjects of each spell table to rebuild.")
    ] = 200,
    junit: Annotated[
        Path | None, typer.Option(metavar="PATH", help="Also write the result to this file, as JUnit XML.")
    ] = None,
    json_file: Annotated[
        Path | None,
        typer.Option("--json", metavar="PATH", help="Also write the result to this file, as JSON."),
    ] = None,
) -> None:
    """Recompute every figure that your dbt project publishes with Spellcurve, and compare.

    Runs in a dbt project, after the models were built. The warehouse adds the spells up; what should come of
    them is worked out here, in exact fractions and with lifelines or scipy, and compared with your tables.
    Spell tables are rebuilt for a sample of subjects. Nothing is written to the warehouse.

    Exit status: 0 all figures agree, 1 some do not or are stale, 2 something could not be checked.
    """
    out = Console(highlight=False)
    from spellcurve.check import CheckError, check_project  # not at the top: dbt takes seconds to load
    from spellcurve.reports import as_json, as_junit

    try:
        with _progress(out) as progress:
            task = progress.add_task("Starting", total=None)

            def announce(doing: str, done: int, of: int) -> None:
                progress.update(task, description=doing, completed=done, total=of or None)

            result = check_project(
                project_dir,
                select=select or (),
                exclude=exclude or (),
                profiles_dir=profiles_dir,
                profile=profile,
                target=target,
                variables=_read_variables(variables),
                tolerance=tolerance,
                sample=sample,
                announce=announce,
            )
        for path, text in ((junit, as_junit), (json_file, as_json)):
            if path is not None:
                path.parent.mkdir(parents=True, exist_ok=True)
                path.write_text(text(result), encoding="utf-8")
    except (CheckError, ValueError, OSError) as error:
        raise _could_not_run(str(error)) from error
    if not result.calls:
        raise _could_not_run(
            f"None of the selected models in {result.project} calls a Spellcurve macro; change --select, or "
            "add the package to the project."
        )
    _print(out, result)
    raise typer.Exit(result.exit_status)


def _read_variables(text: str) -> dict[str, Any]:
    import yaml  # dbt depends on it

    try:
        given = yaml.safe_load(text)
    except yaml.YAMLError as error:
        raise ValueError(
            f"--vars is no YAML ({' '.join(str(error).split())}); write for instance '{{day: 7}}'."
        ) from error
    if not isinstance(given or {}, dict):
        raise ValueError(f"--vars is {text!r}, which has no names; write for instance '{{day: 7}}'.")
    return given or {}


def _could_not_run(sentence: str) -> typer.Exit:
    Console(stderr=True, highlight=False, soft_wrap=True).print(f"[red]Could not run:[/] {escape(sentence)}")
    return typer.Exit(COULD_NOT_RUN)


def _progress(out: Console) -> Progress:
    columns = (
        SpinnerColumn(),
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
    )
    return Progress(*columns, console=out, transient=True)


def _print(out: Console, result: CheckResult) -> None:
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold")
    for name in ("", "model", "macro"):
        table.add_column(name, overflow="fold")
    for name in ("rows", "figures", "largest difference"):
        table.add_column(name, justify="right")
    table.add_column("verdict")
    for call in result.calls:
        checked = bool(call.comparisons)
        table.add_row(
            _STYLES[call.verdict],
            escape(call.model),
            call.macro,
            f"{call.rows:,}" if checked else "",
            f"{call.figures:,}" if checked else "",
            f"{call.largest_difference:.1e}" if checked else "",
            call.verdict,
        )
    out.print(table)
    for call in result.calls:
        if call.verdict == "agrees":
            continue
        out.print(
            f"\n{_STYLES[call.verdict]} [bold]{escape(call.model)}[/] ({escape(call.path)}): {call.verdict}"
        )
        sentences = call.sentences
        for sentence in sentences[:_SHOWN]:
            out.print(Padding(escape(sentence), (0, 0, 0, 2)))
        if len(sentences) > _SHOWN:
            out.print(f"  … and {len(sentences) - _SHOWN:,} more.")
        if call.note:
            out.print(Padding(escape(call.note), (0, 0, 0, 2)))
        if call.verdict == "disagrees":
            out.print(
                Padding(
                    "The model's SQL itself gives these figures: look at what the model changes in the "
                    "macro's rows, at macros of yours that take the place of the package's, and at what it "
                    "reads.",
                    (0, 0, 0, 2),
                )
            )
    out.print(f"\n{_summary(result)}")


def _summary(result: CheckResult) -> str:
    count = {verdict: sum(call.verdict == verdict for call in result.calls) for verdict in _STYLES}
    figures = sum(call.figures for call in result.calls)
    models = len({call.model for call in result.calls})
    said = ", ".join(f"{number} {verdict}" for verdict, number in count.items() if number)
    head = f"{_count(models, 'model')} on {result.adapter}, {figures:,} figures compared: {said}."
    if result.agrees:
        return f"[green]✓[/] {head}"
    return f"[{'red' if result.exit_status == 1 else 'yellow'}]✗[/] {head}"


def _count(number: int, noun: str) -> str:
    return f"{number:,} {noun}" + ("" if number == 1 else "s")
