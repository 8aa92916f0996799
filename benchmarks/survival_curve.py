"""What survival_curve costs beside the least that any answer must cost: one aggregation of the spells.

Every figure is a ratio of two times from one run on one machine. The ways of getting the curve take turns,
round by round in an order drawn anew, so that whatever else the machine does falls on all of them alike; a
ratio is the median over the rounds of the ratio within a round.
"""

from __future__ import annotations

import argparse
import os
import platform
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import partial
from importlib.metadata import version
from pathlib import Path
from random import Random
from statistics import median

import duckdb
import lifelines
import numpy as np
import pandas as pd

PACKAGE = Path(__file__).resolve().parents[1]
RESULTS = Path(__file__).with_name("results.md")
GROUPS = 20
LONGEST = 1500
TARGET = 1.15

# Durations thin out exponentially, faster in some groups than in others; 4 in 10 spells end by the event.
MAKE_SPELLS = f"""
create or replace table {{table}} as
with draws as (
    select
        number,
        cast(floor(random() * {GROUPS}) as integer) as group_number,
        random() as length,
        random() as ending
    from range({{rows}}) as numbers(number)
),
lengths as (
    select
        number,
        'plan ' || lpad(cast(group_number as varchar), 2, '0') as plan,
        cast(least({LONGEST}, floor(-ln(1 - length) * (250 + 15 * group_number))) as bigint) as duration,
        case when ending < 0.4 then 1 else 0 end as event
    from draws
)
select
    number as subject_id,
    cast(1 as bigint) as spell_number,
    date '2024-07-01' - cast(duration as integer) as started_at,
    date '2024-07-01' as last_seen_at,
    cast(0 as bigint) as entry,
    duration,
    cast(event as bigint) as event,
    case when event = 1 then 'event' end as cause,
    cast(1 as bigint) as weight,
    plan
from lengths
"""

# The same spells, but three in ten entered late, somewhere in their course.
MAKE_LATE_SPELLS = """
create or replace table late_spells as
select * replace (
    cast(case when random() < 0.3 then floor(random() * duration) else 0 end as bigint) as entry
)
from spells
"""

COUNT = "select plan, duration, event, count(*) as spells from spells group by plan, duration, event"
SUM = "select plan, duration, event, sum(weight) as spells from spells group by plan, duration, event"

# The way that comes to mind first: each spell beside every day that it was at risk on.
DAY_GRID = f"""
with days as (
    select number as day from range({LONGEST} + 1) as numbers(number)
),
daily as (
    select
        spells.plan,
        days.day,
        sum(spells.weight) as at_risk,
        sum(case when spells.duration = days.day then spells.event * spells.weight else 0 end) as events
    from {{table}} as spells
    inner join days on spells.duration >= days.day
    group by spells.plan, days.day
)
select
    plan,
    day as duration,
    at_risk,
    events,
    case
        when max(case when events = at_risk then 1 else 0 end) over so_far = 1 then 0
        else exp(sum(case when events < at_risk then ln(1 - events / at_risk) end) over so_far)
    end as survival
from daily
window so_far as (partition by plan order by day rows between unbounded preceding and current row)
"""


PROFILE = """
bench:
  target: bench
  outputs:
    bench: {{type: duckdb, path: '{database}'}}
"""
SOURCES = """
sources:
  - name: bench
    schema: main
    tables:
      - name: spells
      - name: late_spells
"""

PAGE = """\
# survival_curve beside other ways to the same curve

Written by `make bench`: every figure below comes from one run of benchmarks/survival_curve.py.

{spells:,} spells in {groups} groups, durations of 0 to {longest} days, 40 % ended by the event. The ways
take turns, in an order drawn anew for each round, and a ratio is the median over the rounds of the ratio
within a round.

| way | spells | rounds | seconds | processor seconds | ratio of seconds | ratio of processor seconds |
| --- | ---: | ---: | ---: | ---: | ---: | ---: |
{rows}

Seconds are medians. Ratios are to the bare aggregation with sum(weight), per spell.

Target: survival_curve at no more than {target} times the bare aggregation. This run: {ratio:.2f} by the
clock, {work:.2f} by the processor, which is the steadier of the two on a machine with other work to do.

In the tenth of the rounds that were soonest done, when the machine was at its fastest, the bare aggregation
took {best_base:.3f} seconds and the curve {best:.2f} times that: part of what the curve adds, such as the
planning of its query, takes as long however few the spells are.

Largest difference in survival from lifelines, over all groups and durations: {difference:.1e}.

What is compared:

- The bare aggregation sums the weights by group, duration and event: the least that any curve of weighted
  spells must do. Counting rows is what would do if every row stood for one spell.
- Those that entered late did so somewhere in their course, so few of them share both entry and duration.
- Everything in SQL is timed as `create or replace table … as`.
- Between the turns the database writes a checkpoint, which would otherwise fall into some of them.
- lifelines is timed with the fetching of its input from the database, group by group, survival and interval.
- The day grid joins each spell to every day that it was at risk on{grid_note}.

Machine: {machine}.
"""


@dataclass
class Way:
    """One way of getting a result from the spells, and what it took in each round.

    Attributes:
        name: how the results call it.
        run: does the work once.
        rows: spells it works on.
        rounds: the number of rounds it takes part in; slow ways take part in fewer.
        seconds: what each round took, by the clock.
        work: processor seconds that each round took, over all threads.
    """

    name: str
    run: Callable[[], object]
    rows: int
    rounds: int
    seconds: list[float] = field(default_factory=list)
    work: list[float] = field(default_factory=list)

    def take_a_turn(self) -> None:
        """Run once and note the seconds."""
        begun, begun_work = time.perf_counter(), time.process_time()
        self.run()
        self.seconds.append(time.perf_counter() - begun)
        self.work.append(time.process_time() - begun_work)


def compiled_curves(folder: Path, options: str, *tables: str) -> list[str]:
    """The SQL of `spellcurve.survival_curve` on each of the tables, as dbt compiles it for DuckDB.

    Raises:
        SystemExit: dbt could not install the package or compile the model; its output says why.
    """
    project = folder / "project"
    (project / "models").mkdir(parents=True)
    files = {
        "dbt_project.yml": "name: bench\nprofile: bench\n",
        "packages.yml": f"packages:\n  - local: {PACKAGE}\n",
        "profiles.yml": PROFILE.format(database=folder / "bench.duckdb"),
        "models/sources.yml": SOURCES,
    }
    for table in tables:
        call = f"spellcurve.survival_curve(source('bench', '{table}'), {options})"
        files[f"models/curve_of_{table}.sql"] = "{{ " + call + " }}\n"
    for name, text in files.items():
        (project / name).write_text(text)
    environment = {**os.environ, "DBT_SEND_ANONYMOUS_USAGE_STATS": "false"}
    for command in ("deps", "compile"):
        done = subprocess.run(
            [sys.executable, "-m", "dbt.cli.main", "--quiet", command],
            cwd=project,
            env=environment,
            capture_output=True,
            text=True,
            check=False,
        )
        if done.returncode:
            sys.exit(f"dbt {command} failed:\n{done.stdout}{done.stderr}")
    compiled = project / "target" / "compiled" / "bench" / "models"
    return [(compiled / f"curve_of_{table}.sql").read_text() for table in tables]


def fit_raw(connection: duckdb.DuckDBPyConnection, table: str = "spells") -> dict[str, pd.Series]:
    """Fetch every spell, then fit each group with the reference estimator."""
    spells = connection.sql(f"select plan, duration, event from {table}").df()
    fits = {}
    for plan, rows in spells.groupby("plan"):
        fit = lifelines.KaplanMeierFitter().fit(rows["duration"], rows["event"])
        fits[plan] = fit.survival_function_["KM_estimate"]
    return fits


def fit_aggregated(connection: duckdb.DuckDBPyConnection) -> dict[str, pd.Series]:
    """Aggregate in the warehouse, fetch the counts, then fit each group with the reference estimator."""
    counts = connection.sql(COUNT).df()
    fits = {}
    for plan, rows in counts.groupby("plan"):
        fit = lifelines.KaplanMeierFitter().fit(rows["duration"], rows["event"], weights=rows["spells"])
        fits[plan] = fit.survival_function_["KM_estimate"]
    return fits


def largest_difference(curve: pd.DataFrame, fits: dict[str, pd.Series]) -> float:
    """Largest absolute difference in survival between a curve table and the reference fits of its groups."""
    worst = 0.0
    assert set(curve["plan"]) == set(fits)
    for plan, rows in curve.groupby("plan"):
        reference = fits[plan].reindex(rows["duration"], method="ffill").to_numpy()
        worst = max(worst, float(np.abs(rows["survival"].to_numpy(dtype=float) - reference).max()))
    return worst


def take_turns(ways: list[Way], tidy_up: Callable[[], object]) -> None:
    """Round by round, let each way run once; a turn of the first comes before, unmeasured, to warm up.

    The order of a round is drawn, since what ran before leaves the caches as it does. Before each turn,
    unmeasured too, the database tidies up: otherwise it would do so now and then in the middle of some turn,
    on account of what all the ways have written since, and more often in the turns that write more.
    """
    ways[0].run()
    order = Random(1)
    for number in range(max(way.rounds for way in ways)):
        running = [way for way in ways if number < way.rounds]
        for way in order.sample(running, len(running)):
            tidy_up()
            way.take_a_turn()
        taken = [f"{way.name} {way.seconds[-1]:.2f} s" for way in running]
        print(f"round {number + 1}: " + ", ".join(taken), flush=True)


def ratio(way: Way, base: Way, of: str = "seconds") -> float:
    """Median over the rounds of one way's `seconds` or `work`, per spell, over the other's."""
    per_round = zip(getattr(way, of), getattr(base, of), strict=False)
    return median(own / other for own, other in per_round) * base.rows / way.rows


def at_its_fastest(way: Way, base: Way) -> tuple[float, float]:
    """The median ratio, and the base's seconds, in the tenth of the rounds that both were soonest done in."""
    together = sorted(zip(way.seconds, base.seconds, strict=False), key=sum)
    soonest = together[: max(1, len(together) // 10)]
    return median(own / other for own, other in soonest), median(other for _, other in soonest)


def report(ways: list[Way], base: Way, difference: float, arguments: argparse.Namespace) -> str:
    """The results as a Markdown page."""
    curve = next(way for way in ways if way.name == "survival_curve")
    rows = []
    for way in ways:
        measured = f"{len(way.seconds)} | {median(way.seconds):.3f} | {median(way.work):.3f}"
        ratios = f"{ratio(way, base):.2f} | {ratio(way, base, 'work'):.2f}"
        rows.append(f"| {way.name} | {way.rows:,} | {measured} | {ratios} |")
    packages = ("duckdb", "dbt-core", "dbt-duckdb", "lifelines", "pandas")
    machine = [
        f"{os.cpu_count()} cores, {platform.machine()}, {platform.system()}",
        f"Python {platform.python_version()}",
        *(f"{name} {version(name)}" for name in packages),
    ]
    fewer = arguments.grid_spells < arguments.spells
    best, best_base = at_its_fastest(curve, base)
    return PAGE.format(
        spells=arguments.spells,
        groups=GROUPS,
        longest=LONGEST,
        rows="\n".join(rows),
        target=TARGET,
        ratio=ratio(curve, base),
        work=ratio(curve, base, "work"),
        best=best,
        best_base=best_base,
        difference=difference,
        grid_note=", and was given fewer spells: it is slow" * fewer,
        machine=", ".join(machine),
    )


def parse(arguments: list[str] | None = None) -> argparse.Namespace:
    """Read the command line."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    option = parser.add_argument
    option("--spells", type=int, default=10_000_000, help="how many spells (default: ten million)")
    option("--grid-spells", type=int, default=1_000_000, help="how many spells the day grid is given")
    option("--rounds", type=int, default=201, help="rounds of the fast ways; slow ways take three")
    option("--fast-only", action="store_true", help="leave out lifelines and the day grid")
    option("--options", default="by=['plan']", help="arguments of survival_curve after the spells")
    option("--output", type=Path, default=RESULTS, help="the page to write")
    return parser.parse_args(arguments)


def main() -> None:
    """Make the spells, take turns, write the page."""
    arguments = parse()
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        connection = duckdb.connect(str(folder / "bench.duckdb"))
        connection.execute("select setseed(0.5)")
        connection.execute(MAKE_SPELLS.format(table="spells", rows=arguments.spells))
        connection.execute(MAKE_LATE_SPELLS)
        connection.execute(MAKE_SPELLS.format(table="some_spells", rows=arguments.grid_spells))
        connection.close()
        curve, late_curve = compiled_curves(folder, arguments.options, "spells", "late_spells")
        connection = duckdb.connect(str(folder / "bench.duckdb"))

        def making(name: str, query: str) -> Callable[[], object]:
            return lambda: connection.execute(f"create or replace table {name} as {query}")

        spells, rounds = arguments.spells, arguments.rounds
        base = Way("bare aggregation, sum(weight)", making("sums", SUM), spells, rounds)
        late = making("late_curve", late_curve)
        ways = [
            base,
            Way("bare aggregation, count(*)", making("counts", COUNT), spells, rounds),
            Way("survival_curve", making("curve", curve), spells, rounds),
            Way("survival_curve, 3 in 10 spells entered late", late, spells, rounds),
        ]
        if not arguments.fast_only:
            few = min(3, rounds)
            grid = making("grid", DAY_GRID.format(table="some_spells"))
            aggregated, raw = partial(fit_aggregated, connection), partial(fit_raw, connection)
            ways += [
                Way("lifelines on the aggregated spells", aggregated, spells, few),
                Way("lifelines on every spell", raw, spells, few),
                Way("day grid, range join", grid, arguments.grid_spells, few),
            ]
        take_turns(ways, lambda: connection.execute("checkpoint"))
        difference = largest_difference(connection.table("curve").df(), fit_aggregated(connection))
        page = report(ways, base, difference, arguments)
    print(page)
    arguments.output.write_text(page)


if __name__ == "__main__":
    main()
