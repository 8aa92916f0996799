"""cumulative_incidence against published figures, reference libraries and open data."""

from __future__ import annotations

import csv
from pathlib import Path
from random import Random

import pandas as pd
import pytest
from lifelines import AalenJohansenFitter
from test_incidence import WHOLE, call, close

SEEDS = Path(__file__).resolve().parents[1] / "seeds" / "reference"

# 35 patients after a stem cell transplant for acute leukaemia, in months: 1 died of the transplant, 2
# relapsed, 0 neither.
# Scrucca, L., Santucci, A. and Aversa, F. (2007). Competing risk analysis using R: an easy guide for
# clinicians. Bone Marrow
# Transplantation 40, 381-387. Data as carried by scikit-survival 0.28.0 (load_bmt): (months, status,
# patients).
TRANSPLANTS = [
    (0, 1, 1),
    (0, 2, 1),
    (1, 1, 1),
    (1, 2, 1),
    (2, 0, 1),
    (2, 2, 1),
    (3, 1, 3),
    (3, 2, 1),
    (4, 0, 1),
    (4, 1, 2),
    (4, 2, 1),
    (5, 2, 1),
    (7, 0, 1),
    (7, 2, 2),
    (8, 0, 1),
    (8, 1, 1),
    (8, 2, 1),
    (9, 2, 1),
    (10, 2, 1),
    (12, 1, 1),
    (13, 2, 1),
    (14, 2, 1),
    (22, 2, 1),
    (26, 2, 1),
    (32, 0, 1),
    (35, 0, 2),
    (67, 0, 1),
    (68, 0, 1),
    (70, 0, 1),
    (72, 0, 1),
]
# (cause, duration, incidence, bounds) as computed by scikit-survival 0.28.0,
# cumulative_incidence_competing_risks with
# conf_type='log-log' and var_type='Dinse_Approx' (the delta method of Dinse and Larson 1986); 12 decimals.
TRANSPLANT_FIGURES = [
    (1, 0, 0.028571428571, 0.002195356172, 0.126822720725),
    (2, 0, 0.028571428571, 0.002195356172, 0.126822720725),
    (1, 3, 0.145812807882, 0.053216160063, 0.282571960894),
    (2, 3, 0.115270935961, 0.036486177557, 0.244189617998),
    (1, 8, 0.237711636379, 0.111705650901, 0.389964827401),
    (2, 8, 0.270505443557, 0.134396255156, 0.426661412267),
    (1, 13, 0.272838987812, 0.135270047001, 0.430274110220),
    (2, 13, 0.375887497856, 0.211916676026, 0.539532635176),
    (1, 26, 0.272838987812, 0.135270047001, 0.430274110220),
    (2, 26, 0.481269552156, 0.299007327769, 0.642100785988),
]
MELANOMA_FIGURES = [
    (1, 1000, 0.127457135957, 0.086102705173, 0.177200085545),
    (2, 1000, 0.034267085245, 0.015205498887, 0.065956831054),
    (1, 2000, 0.230139634397, 0.174257502005, 0.290777221928),
    (2, 2000, 0.050456444532, 0.025758776698, 0.087348375169),
    (1, 3000, 0.309620165658, 0.238999455636, 0.382758983244),
    (2, 3000, 0.058111429047, 0.030462886183, 0.098370190210),
    (1, 4000, 0.338717508914, 0.260109028518, 0.418824251091),
    (2, 4000, 0.105947064136, 0.053986498282, 0.177936024903),
    (1, 5000, 0.338717508914, 0.260109028518, 0.418824251091),
    (2, 5000, 0.105947064136, 0.053986498282, 0.177936024903),
]


def load(engine, rows: list[tuple[int, int, int]]) -> None:
    engine.load(
        "spells",
        WHOLE,
        [
            {
                "entry": 0,
                "duration": t,
                "event": int(status > 0),
                "cause": str(status) if status else None,
                "weight": n,
            }
            for t, status, n in rows
        ],
    )


def melanoma() -> list[tuple[int, int, int]]:
    """205 patients operated on for melanoma (docs/sources.md says where from); 2 here: other causes."""
    with (SEEDS / "reference_melanoma.csv").open(newline="") as file:
        return [
            (int(row["duration"]), {"melanoma": 1, "": 0, "other": 2}[row["cause"]], 1)
            for row in csv.DictReader(file)
        ]


@pytest.mark.parametrize(
    ("rows", "figures"),
    [(TRANSPLANTS, TRANSPLANT_FIGURES), (melanoma(), MELANOMA_FIGURES)],
    ids=["transplants", "melanoma"],
)
def test_two_open_data_sets_against_scikit_survival(engine, rows, figures):
    load(engine, rows)
    found = {
        (row["cause"], row["duration"]): row
        for row in engine.run(call("cumulative_incidence", [], grid="every"))
    }
    for cause, duration, *expected in figures:
        row = found[str(cause), duration]
        for name, value in zip(("incidence", "incidence_lower", "incidence_upper"), expected, strict=True):
            assert close(row[name], value, 0, 1e-11), (cause, duration, name)


def test_melanoma_figures_in_print(engine):
    """Estimate and standard error at 1,000 to 4,000 days, as the R package cmprsk gives them and
    courses print them; from memory.
    Its variance is Aalen's, which the delta method meets here to the printed third place.
    """
    printed = {
        "1": {1000: (0.127, 0.023), 2000: (0.230, 0.030), 3000: (0.310, 0.037), 4000: (0.339, 0.041)},
        "2": {1000: (0.034, 0.013), 2000: (0.050, 0.016), 3000: (0.058, 0.017), 4000: (0.106, 0.032)},
    }
    load(engine, melanoma())
    engine.make("incidences", call("cumulative_incidence", []))
    for row in engine.run("incidence_at('incidences', [1000, 2000, 3000, 4000])"):
        assert round(row["incidence"], 3) == printed[row["cause"]][row["duration"]][0]
    found = {
        (row["cause"], row["duration"]): row
        for row in engine.run(call("cumulative_incidence", [], grid="every"))
    }
    for cause, figures in printed.items():
        for duration, (_, error) in figures.items():
            assert round(found[cause, duration]["std_error"], 3) == error


def test_lifelines_on_untied_data(engine):
    """Its Aalen-Johansen estimator moves tied durations at random, so there are none here. Its variance
    is 0 times infinity
    where the last one at risk ends, so that one is censored.
    """
    dice = Random(1978)
    durations = dice.sample(range(1, 5_000), 400)
    rows = [(t, dice.choice([0, 1, 1, 2]), 1) for t in durations] + [(5_001, 0, 1)]
    load(engine, rows)
    found = {(row["cause"], row["duration"]): row for row in engine.run(call("cumulative_incidence", []))}
    for cause in (1, 2):
        fitter = AalenJohansenFitter(calculate_variance=True)
        fitter.fit(
            pd.Series([t for t, _, _ in rows]), pd.Series([s for _, s, _ in rows]), event_of_interest=cause
        )
        for t, incidence in fitter.cumulative_density_.iloc[:, 0].items():
            row = found[str(cause), int(t)]
            assert abs(row["incidence"] - incidence) < 1e-10
            assert abs(row["std_error"] ** 2 - fitter.variance_.loc[t]) < 1e-10
