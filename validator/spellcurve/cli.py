"""The `spellcurve` command: reads options, calls the library, prints what it found."""

from __future__ import annotations

import importlib.util
import json
import shlex
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer
from rich.console import Console
from rich.markup import escape
from rich.padding import Padding
from rich.table import Table

from spellcurve import __version__
from spellcurve.cli_check import check
from spellcurve.cli_qualify import qualify
from spellcurve.compare import TOLERANCE
from spellcurve.generate import DEFAULT_MEMBERS, DEFAULT_SEED, FEWEST_MEMBERS, MOST_MEMBERS
from spellcurve.summary import (
    BEYOND_FOLLOW_UP,
    MISSING,
    NOT_REACHED,
    REASONS_IN_WORDS,
    average_in_words,
    chance_in_words,
    count_in_words,
    faults_in_words,
    half_in_words,
    incidence_in_words,
    pair_in_words,
    ratio_in_words,
    share_at,
    share_in_words,
    states_in_words,
    status_in_words,
    verdict_in_words,
)

if TYPE_CHECKING:
    from spellcurve.demo import Answer, DemoResult, Ends, Step

AGREEMENT, DISAGREEMENT, COULD_NOT_RUN = 0, 1, 2
_SHOWN_DISAGREEMENTS = 5

app = typer.Typer(
    no_args_is_help=True, add_completion=False, pretty_exceptions_enable=False, rich_markup_mode="markdown"
)


def _show_version(asked: bool) -> None:
    if asked:
        typer.echo(f"spellcurve {__version__}")
        raise typer.Exit


@app.callback()
def spellcurve(
    version: Annotated[
        bool,
        typer.Option(
            "--version", metavar="", callback=_show_version, is_eager=True, help="Show the version and stop."
        ),
    ] = False,
) -> None:
    """Prove that the time-to-event figures in a warehouse are right.

    Start with: spellcurve demo
    """


app.command()(check)
app.command()(qualify)


@app.command()
def demo(
    folder: Annotated[
        Path,
        typer.Option(
            metavar="PATH", help="Where to put the database, dbt's logs and everything else the demo writes."
        ),
    ] = Path("spellcurve-demo"),
    members: Annotated[
        int,
        typer.Option(
            metavar="NUMBER",
            min=FEWEST_MEMBERS,
            max=MOST_MEMBERS,
            help=f"How many members the library has, from {FEWEST_MEMBERS:,} to {MOST_MEMBERS:,}.",
        ),
    ] = DEFAULT_MEMBERS,
    seed: Annotated[
        int,
        typer.Option(metavar="NUMBER", min=0, help="Another seed invents another library of the same kind."),
    ] = DEFAULT_SEED,
    check_only: Annotated[
        bool,
        typer.Option(
            "--check-only",
            metavar="",
            help="Build nothing; check and show the tables that an earlier run left in the folder.",
        ),
    ] = False,
) -> None:
    """Build the figures of an invented tool library on DuckDB, check every one, and show them.

    Records of the Harrow Lane Tool Library, untidy on purpose, become spells and curves by way of dbt,
    in a database file of your own. Each figure is then recomputed with lifelines and in exact fractions.

    Exit status: 0 all figures agree, 1 some do not, 2 the demo could not run.
    """
    out = Console(highlight=False)
    _check_duckdb()
    from spellcurve.demo import (
        DemoError,
        run_demo,
    )  # not at the top: dbt takes seconds to load, --help should not

    try:
        result = run_demo(folder, members, seed, check_only, _steps(out))
    except DemoError as error:
        raise _could_not_run(str(error)) from error
    _print_result(out, result)
    raise typer.Exit(AGREEMENT if result.agrees else DISAGREEMENT)


def _check_duckdb() -> None:
    for module, package in (("duckdb", "duckdb"), ("dbt.adapters.duckdb", "dbt-duckdb")):
        if importlib.util.find_spec(module) is None:
            raise _could_not_run(f"{package} is not installed; run: pip install 'spellcurve[duckdb]'")


def _could_not_run(sentence: str) -> typer.Exit:
    Console(stderr=True, highlight=False, soft_wrap=True).print(f"[red]Could not run:[/] {escape(sentence)}")
    return typer.Exit(COULD_NOT_RUN)


def _steps(out: Console) -> Step:
    @contextmanager
    def step(doing: str) -> Iterator[None]:
        started = time.monotonic()
        with out.status(f"{doing} …"):
            yield
        out.print(f"[green]✓[/] {doing} [dim]({time.monotonic() - started:.1f} s)[/]")

    return step


def _print_result(out: Console, result: DemoResult) -> None:
    out.print()
    out.print(
        "[bold]The Harrow Lane Tool Library[/], all of it made up, "
        f"as known at the start of {_date(result.as_of)}.\n"
        f"{result.members:,} members are on its books; {result.still_members:,} were still members on "
        f"{_date(result.known_until)}."
    )
    for answer in result.answers:
        _print_answer(out, answer)
    _print_leaving(out, result.ends)
    _print_loans(out, result.ends)
    _print_states(out, result.ends)
    _print_how_to_read(out, result)
    _print_refusals(out, result)
    _print_agreement(out, result)
    _print_where(out, result)


def _date(day: date) -> str:
    return f"{day.day} {day:%B %Y}"


def _print_answer(out: Console, answer: Answer) -> None:
    question = answer.question
    table = _plain_table()
    table.add_column("")
    for group in answer.groups:
        table.add_column(group.label, style="none")
    table.add_row("spells", *(f"{group.spells:,}" for group in answer.groups))
    table.add_row("still going", *(f"{group.open_spells:,}" for group in answer.groups))
    table.add_row("followed for", *(f"{group.follow_up:,} {question.unit}" for group in answer.groups))
    table.add_row(f"{question.half_means}", *(half_in_words(group.half) for group in answer.groups))
    for place, duration in enumerate(question.durations):
        table.add_row(
            f"{question.survival_means} {duration:,} {question.unit}",
            *(share_in_words(group.shares[place]) for group in answer.groups),
        )
    table.add_row(
        f"average {question.unit} within {question.horizon:,}",
        *(average_in_words(group.average) for group in answer.groups),
    )
    _print_section(out, question.title, question.note, table)
    for row in answer.tests:
        if row["group_a"] is None:
            out.print(f"  {question.differ} {verdict_in_words(row)}")
        else:
            out.print(f"    {pair_in_words(row)}")


def _print_section(out: Console, title: str, note: str, table: Table) -> None:
    out.print(f"\n[bold]{title}[/]")
    out.print(f"[dim]{note}[/]")
    out.print(Padding(table, (0, 0, 0, 2)))


def _print_leaving(out: Console, ends: Ends) -> None:
    from spellcurve.demo import LEFT_BY

    plans = [row["plan"] for row in ends.staying]
    table = _plain_table()
    table.add_column(f"by day {LEFT_BY}")
    for plan in plans:
        table.add_column(str(plan), style="none")
    table.add_column("do the plans differ?")
    tests = {row["ending"]: row for row in ends.tests}
    for cause, words in REASONS_IN_WORDS.items():
        shares = {row["plan"]: incidence_in_words(row) for row in ends.leaving if row["cause"] == cause}
        test = tests.get(cause)
        table.add_row(
            f"left: {words}",
            *(shares.get(plan, status_in_words(MISSING)) for plan in plans),
            chance_in_words(test["p_value"], test["status"]) if test else status_in_words(MISSING),
        )
    stay = [share_at([row for row in ends.staying if row["plan"] == plan], LEFT_BY) for plan in plans]
    table.add_row("still members", *(share_in_words(share) for share in stay), "")
    note = (
        "Shares of all memberships; each column adds up to 100%. A reason is told with the others at work: "
        "who has moved away cannot find it too dear any more. p is that of Gray's test, over all of "
        "follow-up."
    )
    _print_section(out, "Why do they leave?", note, table)


def _print_loans(out: Console, ends: Ends) -> None:
    from spellcurve.demo import LOANS_AT

    plans = list(dict.fromkeys(row["plan"] for row in ends.loans))
    differences = {row["duration"]: row for row in ends.loan_differences}
    table = _plain_table()
    table.add_column("loans up to")
    for plan in plans:
        table.add_column(str(plan), style="none")
    table.add_column("household against individual")
    for duration in LOANS_AT:
        counts = [
            count_in_words([row for row in ends.loans if row["plan"] == plan], duration) for plan in plans
        ]
        row = differences.get(duration)
        table.add_row(f"day {duration}", *counts, ratio_in_words(row) if row else status_in_words(MISSING))
    note = (
        "Loans of a member on average, while a membership lasts: the loans of each day, shared among those "
        "who were members on it, and added up. The intervals allow for some borrowing more than others."
    )
    _print_section(out, "How often do they borrow?", note, table)


def _print_states(out: Console, ends: Ends) -> None:
    from spellcurve.demo import STATES, STATES_AT

    table = _plain_table()
    for name in ("", "", *STATES):
        table.add_column(name, style="none", justify="right" if name else "left")
    for plan in dict.fromkeys(row["plan"] for row in ends.states):
        own = [row for row in ends.states if row["plan"] == plan]
        for place, duration in enumerate(STATES_AT):
            shares = states_in_words(own, STATES, duration)
            table.add_row("" if place else str(plan), f"after {duration} days", *shares)
    note = (
        "Of those who joined since July 2020, by days since joining, as the status changes tell it. Who has "
        "lapsed can come back."
    )
    _print_section(out, "Active, paused or lapsed?", note, table)


def _print_how_to_read(out: Console, result: DemoResult) -> None:
    groups = [group for answer in result.answers for group in answer.groups]
    seen = {status for group in groups for status in group.statuses}
    sentences = [
        "In brackets: 95% interval of each figure by itself.",
        "Average: a spell counts up to its event, or up to that day or hour at most.",
    ]
    for status, why in (
        (NOT_REACHED, "the curve has not come down to a half by the end of follow-up."),
        (BEYOND_FOLLOW_UP, "nobody has been followed for that long."),
    ):
        if status in seen:
            sentences.append(f"{status_in_words(status).capitalize()}: {why}")
    out.print()
    for sentence in sentences:
        out.print(f"[dim]{sentence}[/]")


def _plain_table() -> Table:
    return Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold")


def _print_refusals(out: Console, result: DemoResult) -> None:
    table = _plain_table()
    table.add_column("records", no_wrap=True)
    table.add_column("rows", justify="right")
    table.add_column("refused", justify="right")
    table.add_column("why")
    for refusals in result.refusals:
        table.add_row(
            "\n".join(refusals.sources),
            f"{refusals.rows:,}",
            f"{refusals.refused:,}",
            faults_in_words(refusals.faults),
        )
    out.print("\n[bold]Which rows could not be used?[/]")
    out.print("[dim]Every other row is part of exactly one spell; a dbt test counts them.[/]")
    out.print(Padding(table, (0, 0, 0, 2)))


def _print_agreement(out: Console, result: DemoResult) -> None:
    out.print("\n[bold]Are the figures right?[/]")
    exact = sum(table.exact.figures for table in result.tables)
    independent = sum(one.figures for curve in result.checked for one in curve.independent)
    out.print(
        f"{_tick(not result.disagreements)} {len(result.checked)} curves, {len(result.readouts)} "
        f"read-outs and {len(result.checked_ends)} tables of causes, counts and states: {exact:,} figures "
        f"compared with exact fractions, {independent:,} with lifelines; "
        f"largest relative difference {result.largest_difference:.1e} (allowed {_short_power(TOLERANCE)})."
    )
    for model, sentences in result.disagreements.items():
        out.print(f"  [red]{model}[/]: {len(sentences):,} figures or rows disagree.")
        for sentence in sentences[:_SHOWN_DISAGREEMENTS]:
            out.print(Padding(escape(sentence), (0, 0, 0, 4)))
    passed = result.tests_run - len(result.tests_failed)
    out.print(f"{_tick(not result.tests_failed)} {passed} of {result.tests_run} dbt tests passed.")
    for name in result.tests_failed:
        out.print(f"  [red]{name}[/]")


def _short_power(number: float) -> str:
    return f"{number:.0e}".replace("e-0", "e-")


def _tick(good: bool) -> str:
    return "[green]✓[/]" if good else "[red]✗[/]"


def _print_where(out: Console, result: DemoResult) -> None:
    database = _short(result.database)
    table = _plain_table()
    table.show_header = False
    table.add_row("file", escape(str(database)))
    table.add_row("schema", result.schema)
    table.add_row("curves", ", ".join(curve.model for curve in result.checked))
    table.add_row("read-outs", ", ".join(readout.model for readout in result.readouts))
    table.add_row("causes, …", ", ".join(one.model for one in result.checked_ends))
    table.add_row("spells", ", ".join(refusals.spells for refusals in result.refusals))
    table.add_row("refused rows", "beside each spell table, under its name with _faulty")
    table.add_row("records", ", ".join(result.records))
    out.print("\n[bold]Where is it?[/]")
    out.print(Padding(table, (0, 0, 0, 2)))
    tamper = f"update {result.schema}.demo_part_survival set survival = 0.5 where duration = 0"
    again = f"spellcurve demo --check-only --folder {shlex.quote(str(database.parent))}"
    out.print("\nTo look at a table:")
    _print_command(
        out, _in_python(database, f'table("{result.schema}.demo_membership_survival_by_plan").show()')
    )
    out.print("To see the check catch a wrong figure:")
    _print_command(out, _in_python(database, f'execute("{tamper}")'))
    _print_command(out, again)


def _in_python(database: Path, call: str) -> str:
    return f"python -c {shlex.quote(f'import duckdb; duckdb.connect({json.dumps(str(database))}).{call}')}"


def _print_command(out: Console, command: str) -> None:
    out.print(f"  {command}", markup=False, soft_wrap=True)


def _short(path: Path) -> Path:
    """The path as seen from the working directory, where it lies below it."""
    return path.relative_to(Path.cwd()) if path.is_relative_to(Path.cwd()) else path
