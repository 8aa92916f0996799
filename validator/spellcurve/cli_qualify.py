"""The command `spellcurve qualify`: reads options, calls the library, prints and writes what it found."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer
from rich.console import Console
from rich.markup import escape
from rich.padding import Padding
from rich.progress import BarColumn, Progress, SpinnerColumn, TextColumn, TimeElapsedColumn
from rich.table import Table

if TYPE_CHECKING:
    from spellcurve.qualification import Qualification, Source

AGREEMENT, DISAGREEMENT, COULD_NOT_RUN = 0, 1, 2
_SHOWN = 5


def qualify(
    project_dir: Annotated[
        Path, typer.Option(metavar="PATH", help="Folder of your dbt project, whose profile is used.")
    ] = Path(),
    profiles_dir: Annotated[
        Path | None, typer.Option(metavar="PATH", help="Folder of profiles.yml, if dbt would not find it.")
    ] = None,
    profile: Annotated[
        str | None, typer.Option(metavar="NAME", help="Profile to use instead of the project's.")
    ] = None,
    target: Annotated[
        str | None, typer.Option("--target", "-t", metavar="NAME", help="Target to use, as for dbt.")
    ] = None,
    output: Annotated[
        Path, typer.Option("--output", "-o", metavar="PATH", help="Folder for the certificate's two files.")
    ] = Path(),
    package: Annotated[
        Path | None,
        typer.Option(
            metavar="PATH",
            help="Folder of the package to qualify, for instance dbt_packages/spellcurve; by default the one "
            "that came with this command.",
        ),
    ] = None,
    keep: Annotated[
        bool, typer.Option("--keep", metavar="", help="Leave the scratch schema, to look at its tables.")
    ] = False,
) -> None:
    """Prove on your warehouse that the package gives published figures, and write a certificate.

    Loads published observations into a scratch schema of your target, builds the package's reference models
    there, compares each printed figure and, in exact fractions, every row, and drops the schema again.
    Nothing is written anywhere else in the warehouse, and none of your tables is read.

    Exit status: 0 all figures agree, 1 some do not, 2 it could not run.
    """
    out = Console(highlight=False)
    from spellcurve.certificate import verdict, write_certificate  # not at the top: they take a while to load
    from spellcurve.qualification import QualificationError
    from spellcurve.qualification import qualify as run

    try:
        with _progress(out) as progress:
            task = progress.add_task("Starting", total=None)

            def announce(doing: str, done: int, of: int) -> None:
                progress.update(task, description=doing, completed=done, total=of)

            found = run(
                project_dir,
                profiles_dir=profiles_dir,
                profile=profile,
                target=target,
                package=package,
                keep=keep,
                announce=announce,
            )
    except QualificationError as error:
        raise _could_not_run(str(error)) from error
    except KeyboardInterrupt as error:
        raise _could_not_run(f"It was interrupted. {error}".strip()) from None
    try:
        files = write_certificate(found, output)
    except OSError as error:
        raise _could_not_run(
            f"The certificate cannot be written to {output} ({error.strerror}); give another folder with "
            "--output."
        ) from error
    _print(out, found, verdict(found), files)
    if found.left_behind and not keep:
        raise typer.Exit(COULD_NOT_RUN)
    raise typer.Exit(AGREEMENT if found.agrees else DISAGREEMENT)


def _could_not_run(sentence: str) -> typer.Exit:
    Console(stderr=True, highlight=False, soft_wrap=True).print(f"[red]Could not run:[/] {escape(sentence)}")
    return typer.Exit(COULD_NOT_RUN)


def _progress(out: Console) -> Progress:
    columns = (SpinnerColumn(), TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    return Progress(*columns, console=out, transient=True)


def _print(out: Console, found: Qualification, verdict: str, files: Iterable[Path]) -> None:
    there = found.environment
    about = _plain_table()
    about.show_header = False
    about.add_row("engine", escape(there.engine_version))
    about.add_row("adapter", f"dbt-{there.adapter} {there.adapter_version}, dbt {there.dbt_version}")
    about.add_row("package", f"spellcurve {there.package_version}")
    out.print(f"\n[bold]Does Spellcurve give the published figures on {there.adapter}?[/]")
    out.print(Padding(about, (0, 0, 0, 2)))

    table = _plain_table()
    table.add_column("")
    table.add_column("published data")
    table.add_column("figures", justify="right")
    table.add_column("what it shows")
    for source in found.sources:
        own = [one for one in found.figures if one.data_set == source.data_set]
        agreeing = sum(one.agrees for one in own)
        counted = f"{agreeing} of {len(own)}" if own else "none printed"
        table.add_row(_tick(agreeing == len(own)), _cited(source), counted, escape(source.shows))
    out.print("\n[bold]Printed figures[/]")
    memory = sum(one.from_memory for one in found.figures)
    out.print(
        f"[dim]Each compared to its last printed digit. {memory} of them were written down from memory of "
        "the publication.[/]"
    )
    out.print(Padding(table, (0, 0, 0, 2)))

    out.print("\n[bold]Exact fractions[/]")
    wrong = [one for one in found.models if not one.comparison.agrees]
    out.print(
        f"{_tick(not wrong)} {len(found.models)} tables, {found.exact_figures:,} figures recomputed from the "
        f"published observations; largest relative difference {found.largest_difference:.1e}."
    )
    passed = found.tests_run - len(found.tests_failed)
    out.print(f"{_tick(not found.tests_failed)} {passed} of {found.tests_run} dbt tests passed.")
    if found.wrong:
        out.print("\n[bold]What is wrong[/]")
        for sentence in found.wrong[:_SHOWN]:
            out.print(Padding(escape(sentence), (0, 0, 0, 2)))
        if len(found.wrong) > _SHOWN:
            out.print(f"  … and {len(found.wrong) - _SHOWN:,} more; the certificate has them.")
    out.print(f"\n{_tick(found.agrees)} {verdict}")
    out.print("certificate: " + ", ".join(escape(str(path)) for path in files), soft_wrap=True)
    if found.left_behind:
        out.print(
            f"scratch schema [bold]{escape(found.schema)}[/]: {escape(found.left_behind)}", soft_wrap=True
        )


def _cited(source: Source) -> str:
    return escape(source.data_set.replace("_", " "))


def _plain_table() -> Table:
    return Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold")


def _tick(good: bool) -> str:
    return "[green]✓[/]" if good else "[red]✗[/]"
