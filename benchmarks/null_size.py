"""How often tests of groups reject where there is no difference: 2,000 small data sets in one query.

    python benchmarks/null_size.py [--simulations 2000] [--seed 5]

The data sets of a design have groups of one size. All spells have the same distribution, whole durations
with many ties; a third or so are censored, and one in four enters late. One query tests all data sets of a
design (``by='simulation'``), once for each weighting. Prints the table that docs/comparisons.md has.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))

from harness import DuckDB

WEIGHTINGS = (
    "log-rank",
    "gehan",
    "tarone-ware",
    "peto",
    "modified-peto",
    "fleming-harrington(1, 0)",
    "fleming-harrington(0, 1)",
    "fleming-harrington(1, 1)",
)
#: Groups, and spells in each.
DESIGNS = ((3, 20), (2, 50), (2, 100), (2, 200))
COLUMNS = {
    "simulation": "bigint",
    "plan": "bigint",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "weight": "bigint",
}


def simulated(simulations: int, groups: int, of_each: int, seed: int) -> dict[str, np.ndarray]:
    """The spells of all data sets, by column: groups that do not differ."""
    dice = np.random.default_rng(seed)
    spells = simulations * groups * of_each
    numbers = np.arange(spells)
    event_at, censored_at = dice.geometric(0.06, spells), dice.geometric(0.03, spells)
    duration = np.minimum(event_at, censored_at)
    late = dice.uniform(size=spells) < 0.25
    entry = np.where(late, np.minimum(dice.integers(0, 6, spells), duration - 1), 0)
    return {
        "simulation": numbers // (groups * of_each),
        "plan": numbers % groups,
        "entry": entry,
        "duration": duration,
        "event": (event_at <= censored_at).astype(int),
        "weight": np.ones(spells, int),
    }


def rejections(engine: DuckDB, weighting: str, groups: int, level: float = 0.05) -> tuple[int, int]:
    """How many of the data sets loaded were tested, and how many of them have a p-value up to the level."""
    options = f"by='simulation', weighting={weighting!r}, most_groups={groups}"
    rows = engine.run(f"log_rank_test('null_spells', 'plan', {options})")
    tested = [row["p_value"] for row in rows if row["p_value"] is not None]
    return len(tested), sum(p <= level for p in tested)


def load(engine: DuckDB, spells: dict[str, np.ndarray]) -> None:
    """Make the table `null_spells`."""
    import pandas as pd

    frame = pd.DataFrame(spells)
    engine.connection.register("null_frame", frame)
    engine.execute("create or replace table null_spells as select * from null_frame")


def main(arguments: list[str] | None = None) -> None:
    """Simulate, test and print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("--simulations", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=5)
    options: Any = parser.parse_args(arguments)
    engine = DuckDB(Path(tempfile.mkdtemp()))
    shares: dict[str, list[str]] = {weighting: [] for weighting in WEIGHTINGS}
    for groups, of_each in DESIGNS:
        load(engine, simulated(options.simulations, groups, of_each, options.seed))
        for weighting in WEIGHTINGS:
            tested, rejected = rejections(engine, weighting, groups)
            if tested != options.simulations:
                sys.exit(f"{weighting}: {tested} of {options.simulations} data sets were tested.")
            shares[weighting].append(f"{rejected / tested:.2%}")
    print("| weighting | " + " | ".join(f"{groups} of {of_each}" for groups, of_each in DESIGNS) + " |")
    print("| --- |" + " --- |" * len(DESIGNS))
    for weighting, row in shares.items():
        print(f"| {weighting} | " + " | ".join(row) + " |")
    reach = 2 * (0.05 * 0.95 / options.simulations) ** 0.5
    print(f"\nSampling error of 5% (two): {0.05 - reach:.2%} to {0.05 + reach:.2%}")


if __name__ == "__main__":
    main()
