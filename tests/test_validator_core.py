"""The validator's arithmetic, plain builders and comparison, checked against the outside and by hand."""

import itertools
import math
from dataclasses import replace
from datetime import date, datetime, timedelta
from decimal import Decimal
from fractions import Fraction

import pytest
import spellcurve
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from spellcurve import (
    CurveRow,
    ProvenanceError,
    Spell,
    compare_curves,
    find_provenance,
    first_provenance,
    group_spells,
    survival_curve,
    survival_curves,
)
from spellcurve.exact import COUNTS, ESTIMATES, FIGURES, INTERVAL_SCALES, as_spell, normal_quantile
from spellcurve.independent import independent_curve, independent_curves
from spellcurve.rebuild import (
    FAULTY_COLUMNS,
    SPELL_COLUMNS,
    completed_units,
    read_event,
    read_moment,
    read_number,
    spells_from_activity,
    spells_from_durations,
    spells_from_event_log,
    spells_from_intervals,
    spells_from_status_history,
    spells_to_first_event,
)

# Weeks in remission, Freireich et al. 1963, as reprinted in the textbooks (from memory).
TREATED_EVENTS = (6, 6, 6, 7, 10, 13, 16, 22, 23)
TREATED_CENSORED = (6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35)
PLACEBO_EVENTS = (1, 1, 2, 2, 3, 4, 4, 5, 5, 8, 8, 8, 8, 11, 11, 12, 12, 15, 17, 22, 23)


def treated():
    return [Spell(0, t, 1) for t in TREATED_EVENTS] + [Spell(0, t, 0) for t in TREATED_CENSORED]


def by_duration(rows):
    return {row.duration: row for row in rows}


def table(curves, by=()):
    """The rows of curves as a warehouse would return them, doubles and all."""
    rows = []
    for group, curve in curves.items():
        for row in curve:
            figures = {name: getattr(row, name) for name in FIGURES}
            figures = {
                k: v if v is None else (int(v) if k in COUNTS else float(v)) for k, v in figures.items()
            }
            rows.append({**dict(zip(by, group, strict=True)), "duration": row.duration, **figures})
    return rows


# Exact arithmetic against published figures and against the definitions


def test_remission_curve_has_the_published_survival_and_standard_errors():
    rows = by_duration(survival_curve(treated()))
    published = {6: 0.857, 7: 0.807, 10: 0.753, 13: 0.690, 16: 0.627, 22: 0.538, 23: 0.448}
    assert {t: round(float(rows[t].survival), 3) for t in published} == published
    assert round(rows[6].std_error, 4) == 0.0764
    assert round(rows[23].std_error, 4) == 0.1346
    assert [rows[t].at_risk for t in (6, 7, 10, 13, 16, 22, 23)] == [21, 17, 15, 12, 11, 7, 6]


def test_remission_curve_of_the_placebo_group_is_the_share_left():
    rows = survival_curve([Spell(0, t, 1) for t in PLACEBO_EVENTS])
    for row in rows:
        left = sum(t > row.duration for t in PLACEBO_EVENTS)
        assert row.survival == Fraction(left, 21)
        if left not in (0, 21):
            assert row.std_error == pytest.approx(math.sqrt(left * (21 - left) / 21**3), rel=1e-14)
    assert rows[-1].std_error is rows[-1].survival_lower is rows[-1].survival_upper is None


def test_normal_quantile_has_the_tabled_digits():
    # 1.959963984540054 is in every table; the further digits come from memory.
    assert str(normal_quantile(0.95)).startswith("1.9599639845400542355245944305")
    for confidence in (0.5, 0.8, 0.9, 0.99, 0.999999):
        ours = float(normal_quantile(confidence))
        assert ours == pytest.approx(stats.norm.ppf((1 + confidence) / 2), rel=1e-9)
        assert stats.norm.cdf(ours) - stats.norm.cdf(-ours) == pytest.approx(confidence, rel=1e-14)


def test_late_entry_counts_from_the_unit_after_it():
    rows = by_duration(survival_curve([Spell(2, 4, 1), Spell(0, 2, 1), Spell(0, 4, 0), Spell(3, 3, 1)]))
    assert sorted(rows) == [0, 2, 4]  # a spell that enters at its own end counts nowhere
    assert [rows[t].at_risk for t in (0, 2, 4)] == [2, 2, 2]
    assert rows[2].survival == Fraction(1, 2)
    assert rows[4].survival == Fraction(1, 4)


def test_a_spell_of_no_length_counts_at_0():
    rows = survival_curve([Spell(0, 0, 1), Spell(0, 0, 0), Spell(0, 3, 0)])
    assert [(r.duration, r.at_risk, r.events, r.censored) for r in rows] == [(0, 3, 1, 1), (3, 1, 0, 1)]
    assert rows[0].survival == Fraction(2, 3)


def test_a_group_that_was_never_at_risk_has_its_row_at_0():
    (row,) = survival_curve([Spell(5, 5, 1)], grid="every")
    assert (row.duration, row.at_risk, row.events, row.hazard, row.survival) == (0, 0, 0, 0, 1)
    assert (row.std_error, row.survival_lower, row.survival_upper) == (0, 1, 1)
    assert survival_curve([]) == []


def test_survival_stays_0_while_the_hazard_sum_goes_on():
    rows = by_duration(survival_curve([Spell(0, 2, 1), Spell(4, 6, 1), Spell(4, 8, 0)]))
    assert [rows[t].survival for t in (0, 2, 6, 8)] == [1, 0, 0, 0]
    assert [rows[t].std_error for t in (0, 2, 6, 8)] == [0, None, None, None]
    assert [rows[t].cumulative_hazard for t in (2, 6)] == [1, Fraction(3, 2)]
    assert rows[6].cumulative_hazard_std_error == pytest.approx(math.sqrt(1 + 1 / 4), rel=1e-15)


def test_horizon_cuts_rows_and_nothing_else():
    whole = by_duration(survival_curve(treated(), grid="every"))
    cut = survival_curve(treated(), horizon=12)
    assert [row.duration for row in cut] == [0, 6, 7, 9, 10, 11, 12]
    assert all(row == whole[row.duration] for row in cut)
    assert max(row.duration for row in survival_curve(treated(), horizon=99)) == 35
    assert [row.duration for row in survival_curve(treated(), horizon=0)] == [0]


def test_the_every_grid_has_each_unit_with_its_own_number_at_risk():
    rows = survival_curve([Spell(2, 5, 1), Spell(0, 3, 0)], grid="every")
    assert [(r.duration, r.at_risk) for r in rows] == [(0, 1), (1, 1), (2, 1), (3, 2), (4, 1), (5, 1)]
    assert [r.duration for r in survival_curve([Spell(0, 9, 1)], grid="every", horizon=2)] == [0, 1, 2]


def test_small_groups_lose_their_estimates_and_on_request_their_counts():
    spells = [Spell(0, 1, 1), Spell(0, 2, 0), Spell(0, 3, 1)]
    kept = by_duration(survival_curve(spells, minimum_at_risk=2))
    assert all(getattr(kept[3], name) is None for name in ESTIMATES)
    assert (kept[3].at_risk, kept[3].events) == (1, 1)
    assert kept[2].survival == Fraction(2, 3)
    hidden = by_duration(survival_curve(spells, minimum_at_risk=2, small_counts="hide"))
    assert all(getattr(hidden[3], name) is None for name in FIGURES)


@pytest.mark.parametrize("number", [int, float, Decimal, Fraction], ids=lambda kind: kind.__name__)
def test_a_spell_is_read_from_any_type_of_number(number):
    row = {"entry": number(2), "duration": number(5), "event": number(1), "weight": number(3) / 2}
    assert as_spell(row, ("solo",), "moved") == Spell(2, 5, 1, Fraction(3, 2), "moved", ("solo",))


@pytest.mark.parametrize(
    ("name", "value", "kind"),
    [
        ("entry", None, "whole number"),
        ("duration", 3.5, "whole number"),
        ("duration", Decimal("NaN"), "whole number"),
        ("event", "yes", "whole number"),
        ("weight", float("inf"), "number"),
        ("weight", float("nan"), "number"),
        ("weight", None, "number"),
    ],
)
def test_a_row_that_is_no_spell_is_refused_with_what_it_is(name, value, kind):
    row = {"entry": 0, "duration": 5, "event": 1, "weight": 1} | {name: value}
    shown = "null" if value is None else value
    with pytest.raises(ValueError, match=rf"{name} {shown}.* in the group solo needs a {kind} as {name}"):
        as_spell(row, ("solo",))


def test_counts_that_are_not_whole_are_null_unless_fractions_are_asked_for():
    spells = [Spell(0, 1, 1, Fraction(1, 2)), Spell(0, 2, 0, 1)]
    whole = survival_curve(spells)
    assert [row.at_risk for row in whole] == [None, None, 1]
    assert whole[1].survival == Fraction(2, 3)
    assert survival_curve(spells, weights="fractional")[1].at_risk == Fraction(3, 2)


@pytest.mark.parametrize(
    ("options", "named"),
    [
        ({"confidence": 1}, "confidence"),
        ({"interval_scale": "square"}, "interval_scale"),
        ({"grid": "all"}, "grid"),
        ({"horizon": -1}, "horizon"),
        ({"small_counts": "drop"}, "small_counts"),
        ({"weights": "round"}, "weights"),
    ],
)
def test_an_unknown_option_is_refused_in_one_sentence(options, named):
    for curve in (survival_curve, independent_curve):
        with pytest.raises(ValueError, match=rf"^{named} is .*; give .*\.$"):
            curve([Spell(0, 1, 1)], **options)


def test_a_spell_that_cannot_be_is_refused():
    for entry, duration, event, weight in ((3, 2, 1, 1), (-1, 2, 1, 1), (0, 2, 2, 1), (0, 2, 1, 0)):
        with pytest.raises(ValueError, match=r"Spell\("):
            Spell(entry, duration, event, weight)
    with pytest.raises(ValueError, match="several groups"):
        survival_curve([Spell(0, 1, 1, group=("a",)), Spell(0, 1, 1, group=("b",))])


def test_groups_are_computed_apart_and_null_is_a_group():
    spells = [Spell(0, 1, 1, group=("a",)), Spell(0, 2, 1, group=(None,)), Spell(0, 3, 0, group=("a",))]
    curves = survival_curves(group_spells(spells), confidence=0.9)
    assert list(curves) == [("a",), (None,)]
    assert [row.survival for row in curves["a",]] == [1, Fraction(1, 2), Fraction(1, 2)]
    assert {row.group for row in curves[None,]} == {(None,)}


def spell_lists(weights):
    one = st.builds(
        lambda entry, length, event, weight: Spell(entry, entry + length, event, weight),
        st.one_of(st.just(0), st.integers(0, 12)),
        st.integers(0, 12),
        st.integers(0, 1),
        weights,
    )
    return st.lists(one, min_size=1, max_size=25)


whole_weights = st.one_of(st.just(1), st.integers(1, 10**6))
fractional_weights = st.integers(1, 40).map(lambda n: Fraction(n, 8))  # eighths are exact as doubles


@given(spell_lists(st.one_of(whole_weights, fractional_weights)))
@settings(max_examples=150, deadline=None)
def test_every_rational_figure_follows_its_definition(spells):
    rows = survival_curve(spells, grid="every", weights="fractional")
    watched = [s for s in spells if not s.entry == s.duration > 0]

    def at_risk(t):
        return sum(Fraction(s.weight) for s in watched if s.entry < t <= s.duration or (t == s.entry == 0))

    def ended(t, event):
        return sum(Fraction(s.weight) for s in watched if s.duration == t and s.event == event)

    assert [r.duration for r in rows] == list(range(1 + max((s.duration for s in watched), default=0)))
    for row in rows:
        hazards = [ended(t, 1) / at_risk(t) for t in range(row.duration + 1) if at_risk(t)]
        assert (row.at_risk, row.events) == (at_risk(row.duration), ended(row.duration, 1))
        assert row.censored == ended(row.duration, 0)
        assert row.survival == math.prod(1 - h for h in hazards)
        assert row.cumulative_hazard == sum(hazards)
        squares = [ended(t, 1) / at_risk(t) ** 2 for t in range(row.duration + 1) if at_risk(t)]
        assert row.cumulative_hazard_std_error == pytest.approx(math.sqrt(sum(squares)), rel=1e-14)


def interval_in_doubles(s, g, z, scale):
    """The textbook formulas (Borgan and Liestøl 1990), written on the transformed scale."""
    if scale == "linear":
        ends = s - z * s * g, s + z * s * g
    elif scale == "log":
        ends = math.exp(math.log(s) - z * g), math.exp(math.log(s) + z * g)
    elif scale == "log-log":
        half = z * g / abs(math.log(s))
        ends = tuple(math.exp(-math.exp(math.log(-math.log(s)) + side)) for side in (half, -half))
    elif scale == "logit":
        middle, half = math.log(s / (1 - s)), z * g / (1 - s)
        ends = tuple(1 / (1 + math.exp(-(middle + side))) for side in (-half, half))
    else:
        middle, half = math.asin(math.sqrt(s)), z / 2 * math.sqrt(s / (1 - s)) * g
        ends = math.sin(max(0, middle - half)) ** 2, math.sin(min(math.pi / 2, middle + half)) ** 2
    return max(0, ends[0]), min(1, ends[1])


@pytest.mark.parametrize("scale", INTERVAL_SCALES)
@given(spells=spell_lists(whole_weights), confidence=st.sampled_from([0.5, 0.9, 0.95, 0.999]))
@settings(max_examples=60, deadline=None)
def test_bounds_follow_the_formula_of_their_scale(scale, spells, confidence):
    z = stats.norm.ppf((1 + confidence) / 2)
    for row in survival_curve(spells, confidence=confidence, interval_scale=scale):
        if row.survival == 1:
            assert (row.std_error, row.survival_lower, row.survival_upper) == (0, 1, 1)
        elif row.survival == 0:
            assert row.std_error is row.survival_lower is row.survival_upper is None
        else:
            s, g = float(row.survival), math.sqrt(row.greenwood_sum)
            bounds = interval_in_doubles(s, g, z, scale)
            assert (row.survival_lower, row.survival_upper) == pytest.approx(bounds, rel=1e-8, abs=1e-8)
            assert row.std_error == pytest.approx(s * g, rel=1e-13)
            assert 0 <= row.survival_lower <= row.survival <= row.survival_upper <= 1


def test_three_thousand_durations_of_a_thousand_million_spells_stay_exact():
    spells = [Spell(0, t, t % 2, 300_000 + t) for t in range(3000)]
    rows = survival_curve(spells)
    assert len(rows) == 3000
    total = sum(s.weight for s in spells)
    events = [(t, 300_000 + t) for t in range(1, 3000, 2)]
    logs = math.fsum(math.log1p(-d / (total - sum(s.weight for s in spells[:t]))) for t, d in events[:-1])
    assert float(rows[-2].survival) == pytest.approx(math.exp(logs), rel=1e-11)
    assert rows[-1].survival == 0


# lifelines, the independent estimator


def assert_same(spells, **options):
    curves = group_spells(spells)
    exact = survival_curves(curves, **options)
    for group, other in independent_curves(curves, **options).items():
        rows = [vars(row) for row in other.rows]
        found = compare_curves(rows, {(): exact[group]}, columns=other.columns)
        assert found.agrees, found
        assert found.rows == len(exact[group])


def test_lifelines_agrees_on_the_remission_data():
    spells = [replace(s, group=("treated",)) for s in treated()]
    spells += [Spell(0, t, 1, group=("placebo",)) for t in PLACEBO_EVENTS]
    assert_same(spells)
    assert_same(spells, grid="every", horizon=20, confidence=0.8, minimum_at_risk=10)
    vouched = independent_curve(treated()).columns
    assert set(FIGURES) - set(vouched) == {"std_error", "cumulative_hazard_std_error"}
    assert not set(independent_curve(treated(), interval_scale="logit").columns) & {"survival_lower"}


def test_lifelines_vouches_for_no_survival_where_it_refuses_to_fit():
    spells = [Spell(3, 5, 1), Spell(6, 9, 1), Spell(6, 9, 1)]
    curve = independent_curve(spells)
    assert "survival" not in curve.columns
    assert "cumulative_hazard" in curve.columns
    assert_same(spells)


@given(spell_lists(whole_weights), st.sampled_from(["steps", "every"]), st.sampled_from([0.8, 0.95]))
@settings(max_examples=120, deadline=None)
def test_lifelines_agrees_on_any_spells(spells, grid, confidence):
    assert_same(spells, grid=grid, confidence=confidence)


@given(spell_lists(fractional_weights))
@settings(max_examples=60, deadline=None)
def test_lifelines_agrees_on_fractional_weights(spells):
    spells = [*spells, Spell(0, 1, 0, Fraction(1, 8))]
    assert "survival_lower" not in independent_curve(spells).columns
    assert_same(spells, weights="fractional")


# Comparison


def expected_curves():
    spells = [Spell(0, t, t % 2, group=(plan,)) for plan in ("household", None) for t in (1, 2, 3, 4)]
    return survival_curves(group_spells(spells))


def compared(change, **options):
    curves = expected_curves()
    rows = table(curves, by=["plan"])
    change(rows)
    return compare_curves(rows, curves, by=["plan"], **options)


def test_equal_tables_agree_whatever_their_types():
    def retype(rows):
        for place, row in enumerate(rows):
            row["duration"] = Decimal(row["duration"]) if place % 2 else float(row["duration"])
            row["at_risk"] = Decimal(row["at_risk"])
            rows[place] = {name.upper(): value for name, value in row.items()}
        rows.reverse()

    found = compared(retype)
    assert found.agrees
    assert (found.rows, found.figures) == (10, 100)
    assert found.largest_difference < 1e-15
    assert str(found).startswith("Agreement: 10 rows, 100 figures compared")


def only(found):
    assert not found.agrees
    (one,) = found.disagreements
    assert str(one).endswith(".")
    assert str(one) in str(found)
    return one


def test_a_missing_row_is_found():
    one = only(compared(lambda rows: rows.pop(2)))
    assert (one.kind, one.group, one.duration) == ("missing row", ("household",), 2)
    assert one.sentence == "The row at plan = household, duration 2 is missing from the table."


def test_an_extra_row_is_found():
    one = only(compared(lambda rows: rows.append({**rows[0], "duration": 77})))
    assert (one.kind, one.duration) == ("extra row", 77)


def test_a_whole_extra_group_is_found():
    found = compared(lambda rows: rows.extend([{**row, "plan": "pair"} for row in rows[:5]]))
    assert [one.kind for one in found.disagreements] == ["extra row"] * 5


def test_a_duplicate_row_is_found():
    one = only(compared(lambda rows: rows.append(dict(rows[7]))))
    assert (one.kind, one.group, one.duration) == ("duplicate row", (None,), 2)
    assert one.sentence == "The row at plan = null, duration 2 is in the table more than once."


def test_a_null_for_a_figure_is_found():
    one = only(compared(lambda rows: rows[1].update(survival=None)))
    assert (one.kind, one.column, one.actual, one.expected) == (
        "wrong null",
        "survival",
        None,
        Fraction(3, 4),
    )
    assert one.sentence == "survival at plan = household, duration 1 is null, but 0.75 is expected."


def test_a_figure_for_a_null_is_found():
    curves = {(): survival_curve([Spell(0, 2, 1)])}
    rows = table(curves)
    rows[-1]["std_error"] = 0.0
    one = only(compare_curves(rows, curves))
    assert (one.kind, one.column, one.expected) == ("wrong null", "std_error", None)


@pytest.mark.parametrize("figure", ESTIMATES)
def test_a_wrong_figure_is_found_in_every_column(figure):
    def nudge(rows):
        rows[3][figure] *= 1 + 2e-9

    found = compared(nudge)
    one = only(found)
    assert (one.kind, one.column, one.duration) == ("wrong number", figure, 3)
    assert found.largest_difference == pytest.approx(2e-9, rel=1e-4)
    assert found.largest_at == f"{figure} at plan = household, duration 3"
    assert compared(nudge, tolerance=1e-8).agrees


@pytest.mark.parametrize("figure", COUNTS)
def test_counts_must_be_equal_even_where_they_are_huge(figure):
    curves = {(): survival_curve([Spell(0, 1, 1, 10**12), Spell(0, 1, 0, 10**12), Spell(0, 2, 1)])}
    rows = table(curves)
    rows[1][figure] = float(rows[1][figure] + 1)
    assert only(compare_curves(rows, curves)).column == figure


def test_an_expected_0_must_be_0():
    one = only(compared(lambda rows: rows[0].update(cumulative_hazard=1e-30)))
    assert one.sentence.endswith("but 0 is expected, which is not 0.")


@pytest.mark.parametrize("bad", [math.nan, math.inf, Decimal("NaN"), "0.75", True])
def test_what_is_no_finite_number_is_wrong(bad):
    assert only(compared(lambda rows: rows[1].update(survival=bad))).kind == "wrong number"


def test_nan_is_not_null():
    curves = {(): survival_curve([Spell(0, 2, 1)])}
    rows = table(curves)
    rows[-1]["std_error"] = math.nan
    assert only(compare_curves(rows, curves)).kind == "wrong null"


def test_missing_columns_are_found():
    def drop(rows):
        for row in rows:
            del row["hazard"]

    assert only(compared(drop)).sentence == "The table has no column hazard."

    def drop_key(rows):
        for row in rows:
            del row["plan"]

    assert only(compared(drop_key)).column == "plan"


def test_groups_and_their_columns_must_match():
    with pytest.raises(ValueError, match=r"1 grouping column.*'plan', 'town'"):
        compare_curves([], {("household",): []}, by=["plan", "town"])


def test_an_empty_table_misses_every_row():
    found = compared(lambda rows: rows.clear())
    assert [one.kind for one in found.disagreements] == ["missing row"] * 10
    assert "and 7 more" in found.report(limit=3)


def test_a_bound_next_to_0_is_held_to_what_doubles_can_give():
    row = CurveRow((), 0, survival_lower=1e-14)
    assert compare_curves(
        [{"duration": 0, "survival_lower": 0.0}], {(): [row]}, columns=["survival_lower"]
    ).agrees
    one = compare_curves([{"duration": 0, "survival_lower": 2e-12}], {(): [row]}, columns=["survival_lower"])
    assert not one.agrees


# Provenance


COMMENT = (
    '/* spellcurve {"macro":"survival_curve","version":"0.1.0","spells":"\\"db\\".\\"main\\".\\"stays\\"",'
    '"by":["plan"],"confidence":0.95,"horizon":null} */'
)


def test_provenance_is_read_from_anywhere_in_the_statement():
    sql = f"with curve as (\n{COMMENT}\nselect 1 /* other */\n) select * from curve /* spellcurve */"
    (found,) = find_provenance(sql)
    assert (found.macro, found.version, found.by) == ("survival_curve", "0.1.0", ("plan",))
    assert found.spells == '"db"."main"."stays"'
    assert found.options == {"confidence": 0.95, "horizon": None}
    assert first_provenance(sql) == found
    assert find_provenance("select 1") == []
    assert first_provenance("select 1") is None


def test_slashes_in_the_comment_are_escaped_and_read_back():
    (found,) = find_provenance(r'/* spellcurve {"macro":"m","version":"1","note":"a *\/ b"} */')
    assert found.options == {"note": "a */ b"}


def test_several_comments_keep_their_order():
    other = COMMENT.replace("survival_curve", "survival_at")
    found = find_provenance(f"{other}\n{COMMENT}")
    assert [one.macro for one in found] == ["survival_at", "survival_curve"]
    assert first_provenance(f"{other}\n{COMMENT}", macro="survival_curve").by == ("plan",)


@pytest.mark.parametrize(
    ("comment", "why"),
    [
        ('/* spellcurve {"macro": } */', "it is not JSON"),
        ('/* spellcurve {"macro":"m","version":"1"}', "it is not closed"),
        ('/* spellcurve {"version":"1"} */', "does not name a macro"),
        ('/* spellcurve {"macro":"m","version":"1","by":"plan"} */', "not a list of columns"),
        ('/* spellcurve {"macro":"m","version":"1","spells":3} */', "not the name of a relation"),
    ],
)
def test_a_malformed_comment_gives_one_clear_error(comment, why):
    with pytest.raises(
        ProvenanceError, match=f"on line 2 of stays cannot be read: .*{why}.*; compile the model"
    ):
        find_provenance(f"select 1\n{comment}", where="stays")


def test_the_version_is_the_packages():
    assert spellcurve.__version__ == "0.1.0"


# Values and units


@pytest.mark.parametrize(
    ("start", "end", "unit", "length"),
    [
        ("2024-02-28 23:00:00", "2024-03-01", "day", 2),
        ("2024-01-01", "2024-01-14", "week", 1),
        ("2024-01-01", "2024-01-15", "week", 2),
        ("2024-01-31", "2024-02-29", "month", 0),
        ("2024-01-31", "2024-03-31", "month", 2),
        ("2023-12-15", "2024-12-14", "month", 11),
        ("2024-01-01 10:00:00", "2024-01-01 12:59:59.999999", "hour", 2),
        ("2024-01-01 10:00:30", "2024-01-01 10:01:29", "minute", 0),
    ],
)
def test_durations_are_completed_units(start, end, unit, length):
    assert completed_units(read_moment(start), read_moment(end), unit) == length


def test_moments_are_read_strictly():
    assert read_moment("2024-01-02T03:04:05.5") == datetime(2024, 1, 2, 3, 4, 5, 500000)
    assert read_moment(date(2024, 1, 2)) == read_moment("2024-01-02") == datetime(2024, 1, 2)
    assert read_moment("2024-01-02 03:04") == datetime(2024, 1, 2, 3, 4)
    assert read_moment(None) is None
    for bad in (
        "",
        "2024-1-2",
        "02/01/2024",
        "2024-02-30",
        "2024-01-02 03",
        "2024-01-02 03:04.5",
        "2024-01-02 03:04:05.",
        "2024-01-02 ",
        20240102,
        "never",
    ):
        with pytest.raises(ValueError, match=r"."):
            read_moment(bad)


def test_numbers_and_events_are_read_strictly():
    assert [read_number(v) for v in (None, 3, "3.50", Decimal(2))] == [None, 3, Decimal("3.5"), 2]
    for bad in ("", "three", "1_000", "nan", math.inf, True):
        with pytest.raises(ValueError, match=r"no number"):
            read_number(bad)
    assert [read_event(v) for v in (True, 0, 1.0, "T", "false", "1", None)] == [1, 0, 1, 1, 0, 1, None]
    for bad in ("yes", 2, "", 0.5):
        with pytest.raises(ValueError, match=r"neither"):
            read_event(bad)


# The plain builders, case by case


def day(number):
    return f"2024-01-{number:02d}"


def d(number):
    return date(2024, 1, number)


def brief(sound):
    """Subject, number, ends as days of January, entry, duration, event and cause."""
    return [
        (
            row["subject_id"],
            row["spell_number"],
            row["started_at"].day,
            row["last_seen_at"].day,
            row["entry"],
            row["duration"],
            row["event"],
            row["cause"],
        )
        for row in sound
    ]


def faults(faulty):
    return [(row["subject_id"], row["given_start"], row["fault"]) for row in faulty]


def intervals(rows, names=("who", "start", "end", "why", "plan", "seen"), **options):
    relation = [dict(itertools.zip_longest(names, row)) for row in rows]
    options = {"as_of": day(31), "cause": "why", "source_rows": True, **options}
    return spells_from_intervals(relation, "who", "start", "end", **options)


def test_intervals_open_spells_are_censored_at_as_of():
    sound, faulty = intervals([("ann", day(1), day(5), "moved"), ("ben", day(3), None, None)], carry=["plan"])
    assert faulty == []
    assert sound == [
        {
            "subject_id": "ann",
            "spell_number": 1,
            "started_at": d(1),
            "last_seen_at": d(5),
            "entry": 0,
            "duration": 4,
            "event": 1,
            "cause": "moved",
            "weight": 1,
            "source_rows": 1,
            "plan": None,
        },
        {
            "subject_id": "ben",
            "spell_number": 1,
            "started_at": d(3),
            "last_seen_at": d(31),
            "entry": 0,
            "duration": 28,
            "event": 0,
            "cause": None,
            "weight": 1,
            "source_rows": 1,
            "plan": None,
        },
    ]
    assert tuple(sound[0]) == (*SPELL_COLUMNS, "source_rows", "plan")


def test_intervals_every_row_fault_in_order():
    rows = [
        (None, None, None, "x", "p", "soon"),  # the recording comes first
        (None, None, None, "x", "p", day(30)),
        (None, None, None),
        ("a", None, "rubbish"),
        ("a", "rubbish", "rubbish"),
        ("a", day(21), day(1)),  # starts after as_of, before its end is looked at
        ("a", day(5), "rubbish"),
        ("a", day(5), day(4)),
        ("a", day(5), "2024-01-05 00:00:00", "fine", None, day(20)),
    ]
    sound, faulty = intervals(rows, as_of=day(20), recorded_at="seen", carry=["plan"])
    assert [row["fault"] for row in faulty] == [
        "unreadable_recorded_at",
        "recorded_after_as_of",
        "no_subject",
        "no_start",
        "unreadable_start",
        "starts_after_as_of",
        "unreadable_end",
        "ends_before_start",
    ]
    assert brief(sound) == [("a", 1, 5, 5, 0, 0, 1, "fine")]
    assert tuple(faulty[0]) == (*FAULTY_COLUMNS, "plan")
    assert faulty[0]["given_kind"] == "x"
    assert faulty[0]["plan"] == "p"
    assert faulty[6]["given_start"] == day(5)
    assert faulty[6]["given_end"] == "rubbish"


def test_intervals_ends_compare_by_date_or_by_moment_as_the_unit_says():
    rows = [("a", "2024-01-05 12:00:00", "2024-01-05 09:00:00")]
    assert brief(intervals(rows)[0]) == [("a", 1, 5, 5, 0, 0, 1, "unknown")]
    assert intervals(rows, unit="hour")[1][0]["fault"] == "ends_before_start"


def test_intervals_as_of_is_a_moment_and_later_ends_are_unknown():
    rows = [("a", day(1), "2024-01-10 12:00:00", "moved"), ("b", "2024-01-10 12:00:01", None)]
    sound, faulty = intervals(rows, as_of="2024-01-10 12:00:00")
    assert brief(sound) == [("a", 1, 1, 10, 0, 9, 1, "moved")]
    assert faults(faulty) == [("b", "2024-01-10 12:00:01", "starts_after_as_of")]
    assert brief(intervals(rows, as_of=day(10))[0]) == [("a", 1, 1, 10, 0, 9, 0, None)]


def test_intervals_that_touch_or_overlap_merge():
    rows = [
        ("a", day(5), day(8), "second", "late"),
        ("a", day(1), day(5), "first", "early"),
        ("a", day(2), day(3), "inner", "inner"),
        ("a", day(9), day(9), "alone", "new"),
    ]
    sound, _ = intervals(rows, carry=["plan"])
    assert brief(sound) == [("a", 1, 1, 8, 0, 7, 1, "second"), ("a", 2, 9, 9, 0, 0, 1, "alone")]
    assert [(row["source_rows"], row["plan"]) for row in sound] == [(3, "early"), (1, "new")]


def test_intervals_the_furthest_end_counts_and_an_open_one_swallows_the_rest():
    rows = [("a", day(1), day(20), "long"), ("a", day(2), day(3)), ("a", day(19), day(19))]
    assert brief(intervals(rows)[0]) == [("a", 1, 1, 20, 0, 19, 1, "long")]
    rows.append(("a", day(2), None))
    rows.append(("a", day(29), day(30), "later"))
    sound, _ = intervals(rows)
    assert brief(sound) == [("a", 1, 1, 31, 0, 30, 0, None)]
    assert sound[0]["source_rows"] == 5


def test_intervals_causes_that_tie_go_by_the_alphabet():
    rows = [("a", day(1), day(5), "moved"), ("a", day(2), day(5), "cost"), ("a", day(3), day(5), None)]
    assert brief(intervals(rows)[0]) == [("a", 1, 1, 5, 0, 4, 1, "cost")]
    assert brief(intervals(rows[2:])[0])[0][-1] == "unknown"
    assert brief(intervals(rows, cause=None)[0])[0][-1] == "event"


def test_intervals_grace_bridges_gaps_and_moves_the_cut():
    rows = [
        ("a", day(1), day(5), "moved"),
        ("a", day(8), day(10), "cost"),  # 3 days later
        ("a", day(14), day(28), "moved"),  # 4 days later
        ("b", day(1), day(29), "moved"),  # may still come back
        ("c", day(29), None),  # later than the cut
        ("d", day(20), day(22), "cost"),
        ("d", day(25), day(30), "cost"),
    ]
    sound, faulty = intervals(rows, grace=3)
    assert brief(sound) == [
        ("a", 1, 1, 10, 0, 9, 1, "cost"),
        ("a", 2, 14, 28, 0, 14, 1, "moved"),
        ("b", 1, 1, 28, 0, 27, 0, None),
        ("d", 1, 20, 28, 0, 8, 0, None),
    ]
    assert faults(faulty) == [("c", day(29), "starts_within_grace")]


def test_intervals_grace_is_exact_time_for_hours():
    rows = [
        ("a", "2024-01-01 00:00:00", "2024-01-01 02:00:00"),
        ("a", "2024-01-01 04:00:00", "2024-01-01 05:30:00"),
        ("a", "2024-01-01 07:30:01", "2024-01-01 08:30:01"),
    ]
    sound, _ = intervals(rows, grace=2, unit="hour")
    assert [(row["duration"], row["source_rows"]) for row in sound] == [(5, 2), (1, 1)]
    assert sound[0]["last_seen_at"] == datetime(2024, 1, 1, 5, 30)


def test_intervals_kept_one_a_row():
    rows = [("a", day(3), day(9), "x"), ("a", day(1), day(5), "y"), ("a", day(1), None)]
    sound, faulty = intervals(rows, overlaps="keep")
    assert brief(sound) == [
        ("a", 1, 1, 5, 0, 4, 1, "y"),
        ("a", 2, 1, 31, 0, 30, 0, None),
        ("a", 3, 3, 9, 0, 6, 1, "x"),
    ]
    assert faulty == []


def test_intervals_overlaps_refused():
    rows = [
        ("a", day(1), day(10), "kept"),
        ("a", day(1), "2024-01-10 00:00:00", "again"),
        ("a", day(5), day(20), "over"),
        ("a", day(15), day(16), "over a refused row"),
        ("a", day(20), day(22), "touches"),
        ("a", "2024-01-22 00:00:00", None, "touches"),
        ("a", day(30), None, "after an open row"),
    ]
    sound, faulty = intervals(rows, overlaps="refuse")
    assert [row["cause"] for row in sound] == ["kept", "touches", None]
    assert [(row["given_kind"], row["fault"]) for row in faulty] == [
        ("again", "duplicate_row"),
        ("over", "overlaps_earlier"),
        ("over a refused row", "overlaps_earlier"),
        ("after an open row", "overlaps_earlier"),
    ]


def test_intervals_same_day_overlap_counts_for_hours_alone():
    rows = [
        ("a", "2024-01-01 08:00:00", "2024-01-05 12:00:00"),
        ("a", "2024-01-05 11:00:00", "2024-01-07 12:00:00"),
    ]
    assert intervals(rows, overlaps="refuse")[1] == []
    assert intervals(rows, overlaps="refuse", unit="hour")[1][0]["fault"] == "overlaps_earlier"


def test_intervals_observation_gives_late_entry_and_refuses_what_ended_before():
    rows = [
        ("a", day(1), day(9), "x"),
        ("a", day(2), day(3), "merged away"),
        ("b", day(1), day(10), "x"),
        ("c", day(4), None),
        ("d", day(12), day(13), "x"),
    ]
    sound, faulty = intervals(rows, observe_from=day(10))
    assert brief(sound) == [
        ("b", 1, 1, 10, 9, 9, 1, "x"),
        ("c", 1, 4, 31, 6, 27, 0, None),
        ("d", 1, 12, 13, 0, 1, 1, "x"),
    ]
    assert faults(faulty) == [
        ("a", day(1), "ended_before_observation"),
        ("a", day(2), "ended_before_observation"),
    ]


def test_intervals_observation_in_months_and_hours():
    rows = [("a", "2023-11-15", None)]
    sound, _ = intervals(rows, unit="month", observe_from=day(14), as_of=day(15))
    assert (sound[0]["entry"], sound[0]["duration"]) == (1, 2)
    rows = [("a", "2024-01-01 00:30:00", "2024-01-01 03:00:00"), ("b", day(1), "2024-01-01 01:59:59")]
    sound, faulty = intervals(rows, unit="hour", observe_from="2024-01-01 02:00:00")
    assert (sound[0]["entry"], sound[0]["duration"]) == (1, 2)
    assert faults(faulty) == [("b", day(1), "ended_before_observation")]


def test_intervals_known_only_before_observation_were_never_observed():
    # Knowledge stops on the 21st, observation begins on the 25th.
    sound, faulty = intervals([("a", day(1), None), ("b", day(29), None)], grace=10, observe_from=day(25))
    assert sound == []
    assert faults(faulty) == [
        ("a", day(1), "ended_before_observation"),
        ("b", day(29), "starts_within_grace"),
    ]


def test_intervals_without_as_of_stop_at_the_start_of_today():
    (row,), _ = intervals([("a", day(1), None)], as_of=None)
    assert abs(row["last_seen_at"] - date.today()) <= timedelta(days=1)


def test_builders_refuse_options_that_cannot_be():
    for options in (
        {"unit": "year"},
        {"overlaps": "drop"},
        {"grace": -1},
        {"grace": 2, "overlaps": "keep"},
        {"observe_from": "2024-02-01"},
        {"as_of": "tomorrow"},
    ):
        with pytest.raises(ValueError, match=r"; (give|write|grace)"):
            intervals([], **options)


def log(rows, opens="join", closes=("leave", "lapse"), **options):
    names = ("who", "at", "kind", "step", "plan")
    relation = [dict(itertools.zip_longest(names, row)) for row in rows]
    options = {"as_of": day(31), "source_rows": True, **options}
    return spells_from_event_log(relation, "who", "at", "kind", opens, closes, **options)


def test_event_log_pairs_openings_with_closings():
    rows = [("a", day(9), "leave"), ("a", day(2), "join"), ("a", day(12), "join"), ("b", day(4), "join")]
    sound, faulty = log(rows)
    assert brief(sound) == [
        ("a", 1, 2, 9, 0, 7, 1, "event"),
        ("a", 2, 12, 31, 0, 19, 0, None),
        ("b", 1, 4, 31, 0, 27, 0, None),
    ]
    assert [row["source_rows"] for row in sound] == [2, 1, 1]
    assert faulty == []


def test_event_log_every_row_fault():
    rows = [
        (None, None, None),
        ("a", None, None),
        ("a", "rubbish", None),
        ("a", "2024-02-01", None),
        ("a", day(1), None),
        ("a", day(1), "renew"),
        ("a", day(1), "leave"),
        ("a", day(2), "join", None, "red"),
        ("a", day(2), "join", None, "blue"),
        ("a", day(3), "join"),
        ("a", day(4), "leave"),
        ("a", day(5), "lapse"),
    ]
    sound, faulty = log(rows, carry=["plan"])
    assert sorted(row["fault"] for row in faulty) == [
        "after_as_of",
        "already_open",
        "duplicate_row",
        "no_kind",
        "no_subject",
        "no_time",
        "nothing_open",
        "nothing_open",
        "unknown_kind",
        "unreadable_time",
    ]
    assert brief(sound) == [("a", 1, 2, 4, 0, 2, 1, "event")]
    assert sound[0]["plan"] == "red"
    assert sum(row["source_rows"] for row in sound) + len(faulty) == len(rows)


def test_event_log_causes_come_from_a_mapping():
    rows = [("a", day(1), "join"), ("a", day(3), "lapse"), ("b", day(1), "join"), ("b", day(3), "leave")]
    sound, _ = log(rows, closes={"leave": "moved away", "lapse": "lapsed"})
    assert [row["cause"] for row in sound] == ["lapsed", "moved away"]


def test_event_log_ties_at_one_moment():
    rows = [("a", day(1), "join"), ("a", day(4), "join"), ("a", day(4), "leave"), ("a", day(4), "lapse")]
    sound, faulty = log(rows, unit="hour")
    # While one is open the closings come first, by the alphabet; what touches at the same moment is merged.
    assert [(row["event"], row["duration"], row["source_rows"]) for row in sound] == [(0, 720, 3)]
    assert [(row["given_kind"], row["fault"]) for row in faulty] == [("leave", "nothing_open")]
    # While none is open the opening comes first.
    sound, faulty = log([("b", day(4), "leave"), ("b", day(4), "join"), ("b", day(4), "lapse")])
    assert brief(sound) == [("b", 1, 4, 4, 0, 0, 1, "event")]
    assert [(row["given_kind"], row["fault"]) for row in faulty] == [("leave", "nothing_open")]


def test_event_log_sequence_orders_within_a_moment():
    rows = [("a", day(4), "leave", 2), ("a", day(4), "join", 1), ("a", day(4), "join", 3)]
    sound, faulty = log(rows, sequence="step")
    assert faulty == []
    assert brief(sound) == [("a", 1, 4, 31, 0, 27, 0, None)]
    rows = [("a", day(4), "leave", 1), ("a", day(4), "join", 2)]
    sound, faulty = log(rows, sequence="step")
    assert faults(faulty) == [("a", day(4), "nothing_open")]
    assert brief(sound) == [("a", 1, 4, 31, 0, 27, 0, None)]


def test_event_log_grace_merges_and_cuts():
    rows = [
        ("a", day(1), "join"),
        ("a", day(5), "leave"),
        ("a", day(7), "join"),
        ("a", day(9), "lapse"),
        ("b", day(30), "join"),
        ("c", day(30), "join"),
        ("c", day(31), "leave"),
    ]
    sound, faulty = log(rows, grace=2, closes={"leave": "left", "lapse": "lapsed"})
    assert brief(sound) == [("a", 1, 1, 9, 0, 8, 1, "lapsed")]
    assert sound[0]["source_rows"] == 4
    assert [row["fault"] for row in faulty] == ["starts_within_grace"] * 3
    with pytest.raises(ValueError, match="list it under one"):
        log([], opens=["join", "leave"])


def statuses(rows, names=("who", "at", "status", "until", "step", "plan"), **options):
    relation = [dict(itertools.zip_longest(names, row)) for row in rows]
    options = {"as_of": day(31), "source_rows": True, **options}
    return spells_from_status_history(relation, "who", "at", "status", ["active", "trial"], **options)


def test_status_changes_last_until_the_next_row():
    rows = [
        ("a", day(1), "trial"),
        ("a", day(5), "active"),
        ("a", day(9), "stopped"),
        ("a", day(11), "erased"),
        ("a", day(20), "active"),
        ("b", day(3), "stopped"),
        ("b", day(4), "active"),
    ]
    sound, faulty = statuses(rows, cause="status")
    assert brief(sound) == [
        ("a", 1, 1, 9, 0, 8, 1, "stopped"),
        ("a", 2, 20, 31, 0, 11, 0, None),
        ("b", 1, 4, 31, 0, 27, 0, None),
    ]
    assert [row["source_rows"] for row in sound] == [4, 1, 1]
    assert faults(faulty) == [("b", day(3), "nothing_open")]
    assert brief(statuses(rows)[0])[0][-1] == "event"


def test_status_every_row_fault_in_order():
    rows = [
        (None, None, None, "rubbish"),
        ("a", None, None, "rubbish"),
        ("a", "rubbish", None, "rubbish"),
        ("a", "2024-02-01", None, "rubbish"),
        ("a", day(2), None, "rubbish"),
        ("a", day(2), "active", "rubbish"),
        ("a", day(2), "active", day(1)),
        ("a", day(3), "active"),
        ("a", day(3), "stopped"),
    ]
    sound, faulty = statuses(rows, ended="until")
    assert sound == []
    assert [row["fault"] for row in faulty] == [
        "no_subject",
        "no_time",
        "unreadable_time",
        "after_as_of",
        "no_status",
        "unreadable_end",
        "ends_before_start",
        "conflicting_status",
        "conflicting_status",
    ]
    assert (faulty[6]["given_end"], faulty[6]["given_kind"]) == (day(1), "active")


def test_status_a_sequence_settles_what_would_conflict():
    rows = [("a", day(3), "stopped", None, 2), ("a", day(3), "active", None, 1)]
    sound, faulty = statuses(rows, sequence="step")
    assert brief(sound) == [("a", 1, 3, 3, 0, 0, 1, "event")]
    assert faulty == []


def test_status_own_end_goes_before_the_next_row():
    rows = [
        ("a", day(1), "active", day(4)),
        ("a", day(6), "active", None),
        ("a", day(9), "stopped", None),
        ("b", day(1), "active", day(4)),
    ]
    sound, _ = statuses(rows, ended="until", cause="status")
    assert brief(sound) == [
        ("a", 1, 1, 4, 0, 3, 1, "unknown"),  # an active row follows
        ("a", 2, 6, 9, 0, 3, 1, "stopped"),
        ("b", 1, 1, 4, 0, 3, 1, "unknown"),  # no row follows
    ]


def test_status_grace_bridges_a_pause():
    rows = [
        ("a", day(1), "active"),
        ("a", day(5), "paused"),
        ("a", day(7), "active"),
        ("a", day(20), "stopped"),
        ("b", day(30), "active"),
        ("b", day(31), "stopped"),
    ]
    sound, faulty = statuses(rows, grace=2, cause="status")
    assert brief(sound) == [("a", 1, 1, 20, 0, 19, 1, "stopped")]
    assert sound[0]["source_rows"] == 4
    assert [row["fault"] for row in faulty] == ["starts_within_grace"] * 2


def test_status_observation_refuses_all_rows_of_a_spell():
    rows = [
        ("a", day(1), "active"),
        ("a", day(5), "stopped"),
        ("a", day(6), "stopped"),
        ("b", day(1), "active"),
    ]
    sound, faulty = statuses(rows, observe_from=day(8))
    assert brief(sound) == [("b", 1, 1, 31, 7, 30, 0, None)]
    assert [row["fault"] for row in faulty] == ["ended_before_observation"] * 3


def test_status_snapshots_last_until_the_next_date_of_the_calendar():
    rows = [
        ("a", "2024-01-01 08:00:00", "active"),
        ("a", day(3), "active"),
        ("a", day(5), "stopped"),
        ("b", day(1), "active"),
        ("b", day(5), "active"),
        ("b", day(8), "active"),
        ("c", day(8), "trial"),
    ]
    sound, faulty = statuses(rows, shape="snapshots", cause="status")
    assert brief(sound) == [
        ("a", 1, 1, 5, 0, 4, 1, "stopped"),
        ("b", 1, 1, 3, 0, 2, 1, "unknown"),
        ("b", 2, 5, 8, 0, 3, 0, None),
        ("c", 1, 8, 8, 0, 0, 0, None),
    ]
    assert faulty == []
    # As of the 4th, the last date of the calendar is the 3rd.
    early, late = statuses(rows, shape="snapshots", as_of=day(4))
    assert brief(early) == [("a", 1, 1, 3, 0, 2, 0, None), ("b", 1, 1, 3, 0, 2, 1, "event")]
    assert [row["fault"] for row in late] == ["after_as_of"] * 4


def test_status_snapshots_cut_moments_to_dates_and_conflict_within_one():
    rows = [
        ("a", "2024-01-01 08:00:00", "active"),
        ("a", "2024-01-01 09:00:00", "stopped"),
        ("b", day(2), "active"),
    ]
    sound, faulty = statuses(rows, shape="snapshots")
    assert brief(sound) == [("b", 1, 2, 2, 0, 0, 0, None)]
    assert [row["fault"] for row in faulty] == ["conflicting_status"] * 2
    sound, faulty = statuses(rows[2:], shape="snapshots", grace=1)
    assert sound == []
    assert faults(faulty) == [("b", day(2), "starts_within_grace")]


def test_status_snapshots_take_no_end_and_no_sequence():
    for options in ({"ended": "until"}, {"sequence": "step"}):
        with pytest.raises(ValueError, match="takes neither"):
            statuses([], shape="snapshots", **options)


def activity(rows, lapse_after=10, **options):
    relation = [dict(itertools.zip_longest(("who", "at", "tool", "seen"), row)) for row in rows]
    options = {"as_of": day(31), "source_rows": True, **options}
    return spells_from_activity(relation, "who", "at", lapse_after, **options)


ACTIVITY = [
    ("a", day(1), "saw"),
    ("a", day(10), "drill"),  # 9 days later: the same spell
    ("a", day(20), "rake"),  # 10 days later: a new one
    ("b", day(21)),
    ("c", day(22)),
    ("d", day(25)),
]


def test_activity_ends_by_silence():
    sound, faulty = activity(ACTIVITY, carry=["tool"])
    assert brief(sound) == [
        ("a", 1, 1, 20, 0, 19, 1, "event"),
        ("a", 2, 20, 30, 0, 10, 1, "event"),
        ("b", 1, 21, 31, 0, 10, 1, "event"),
        ("c", 1, 22, 31, 0, 9, 0, None),
        ("d", 1, 25, 31, 0, 6, 0, None),
    ]
    assert [row["source_rows"] for row in sound] == [2, 1, 1, 1, 1]
    assert [row["tool"] for row in sound] == ["saw", "rake", None, None, None]
    assert faulty == []


def test_activity_ends_at_the_last_of_it():
    rows = [*ACTIVITY, ("e", day(15)), ("e", day(24))]
    sound, faulty = activity(rows, ends_at="last_activity")
    assert brief(sound) == [
        ("a", 1, 1, 10, 0, 9, 1, "event"),
        ("a", 2, 20, 20, 0, 0, 1, "event"),
        ("b", 1, 21, 21, 0, 0, 1, "event"),
        ("e", 1, 15, 21, 0, 6, 0, None),
    ]
    assert faults(faulty) == [("c", day(22), "starts_within_grace"), ("d", day(25), "starts_within_grace")]


def test_activity_every_row_fault():
    rows = [(None, None), ("a", None), ("a", "rubbish"), ("a", "2024-02-01"), ("a", day(2), "saw", "rubbish")]
    sound, faulty = activity(rows, recorded_at="seen")
    assert sound == []
    assert [row["fault"] for row in faulty] == [
        "no_subject",
        "no_time",
        "unreadable_time",
        "after_as_of",
        "unreadable_recorded_at",
    ]


def test_activity_in_hours_and_observed_late():
    rows = [("a", "2024-01-01 00:00:00"), ("a", "2024-01-01 01:59:59"), ("a", "2024-01-01 03:59:59")]
    sound, _ = activity(rows, lapse_after=2, unit="hour")
    assert [(row["duration"], row["event"]) for row in sound] == [(3, 1), (2, 1)]
    sound, faulty = activity(ACTIVITY[:3], observe_from=day(22))
    assert brief(sound) == [("a", 1, 20, 30, 2, 10, 1, "event")]
    assert [row["fault"] for row in faulty] == ["ended_before_observation"] * 2
    with pytest.raises(ValueError, match="lapse_after is 0"):
        activity([], lapse_after=0)


def first_event(origins, events, **options):
    firsts = [dict(itertools.zip_longest(("who", "joined", "plan", "seen"), row)) for row in origins]
    loans = [dict(itertools.zip_longest(("member", "lent", "tool", "seen"), row)) for row in events]
    options = {"as_of": day(31), "source_rows": True, "event_subject": "member", **options}
    return spells_to_first_event(firsts, loans, "who", "joined", "lent", **options)


def test_first_event_ends_the_spell_of_every_origin_before_it():
    origins = [("a", day(1), "red"), ("a", day(5), "blue"), ("b", day(2)), ("c", "2024-01-03 12:00:00")]
    events = [
        ("a", day(7), "saw"),
        ("a", day(6), "rake"),
        ("a", day(6), "drill"),
        ("c", "2024-01-03 12:00:00", None),
        ("a", day(4), "plane"),
    ]
    sound, faulty = first_event(origins, events, cause="tool", carry=["plan"])
    assert brief(sound) == [
        ("a", 1, 1, 4, 0, 3, 1, "plane"),
        ("a", 2, 5, 6, 0, 1, 1, "drill"),
        ("b", 1, 2, 31, 0, 29, 0, None),
        ("c", 1, 3, 3, 0, 0, 1, "unknown"),
    ]
    assert [(row["source_rows"], row["plan"]) for row in sound] == [
        (2, "red"),
        (4, "blue"),
        (1, None),
        (2, None),
    ]
    assert faulty == []


def test_first_event_may_end_two_spells_and_counts_to_the_later():
    sound, _ = first_event([("a", day(1)), ("a", day(5))], [("a", day(6))])
    assert brief(sound) == [("a", 1, 1, 6, 0, 5, 1, "event"), ("a", 2, 5, 6, 0, 1, 1, "event")]
    assert [row["source_rows"] for row in sound] == [1, 2]


def test_first_event_every_row_fault():
    origins = [
        (None, None),
        ("a", None),
        ("a", "rubbish"),
        ("a", "2024-02-01"),
        ("a", day(3), "red", day(30)),
        ("a", day(3), "blue", "rubbish"),
        ("a", day(5), "red"),
        ("a", day(5), "blue"),
    ]
    events = [(None, None), ("a", None), ("a", "rubbish"), ("a", "2024-02-01"), ("a", day(4)), ("z", day(9))]
    sound, faulty = first_event(
        origins, events, as_of=day(20), recorded_at="seen", carry=["plan"], cause="tool"
    )
    assert [row["fault"] for row in faulty] == [
        "no_subject",
        "no_start",
        "unreadable_start",
        "starts_after_as_of",
        "recorded_after_as_of",
        "unreadable_recorded_at",
        "duplicate_row",
        "no_subject",
        "no_time",
        "unreadable_time",
        "after_as_of",
        "no_origin",
        "no_origin",
    ]
    assert [row["plan"] for row in faulty][4:8] == ["red", "blue", "blue", None]
    assert brief(sound) == [("a", 1, 5, 20, 0, 15, 0, None)]


def test_first_event_orders_by_moment_within_a_day():
    sound, faulty = first_event([("a", "2024-01-05 12:00:00")], [("a", "2024-01-05 11:00:00"), ("a", day(9))])
    assert brief(sound) == [("a", 1, 5, 9, 0, 4, 1, "event")]
    assert faults(faulty) == [("a", "2024-01-05 11:00:00", "no_origin")]


def test_first_event_before_observation_refuses_origin_and_events():
    sound, faulty = first_event(
        [("a", day(1)), ("b", day(1))], [("a", day(4)), ("b", day(12))], observe_from=day(10)
    )
    assert brief(sound) == [("b", 1, 1, 12, 9, 11, 1, "event")]
    assert faults(faulty) == [
        ("a", day(1), "ended_before_observation"),
        ("a", day(4), "ended_before_observation"),
    ]


def durations(rows, **options):
    relation = [
        dict(itertools.zip_longest(("who", "t", "d", "from", "why", "w", "plan"), row)) for row in rows
    ]
    options = {"subject": "who", "entry": "from", "cause": "why", "weight": "w", **options}
    return spells_from_durations(relation, "t", "d", **options)


def test_durations_are_taken_over_and_numbered_by_entry_then_duration():
    rows = [
        ("a", 9, 1, 4, "cost", 2, "red"),
        ("a", "7", "FALSE", 0, "ignored", "1.5", "blue"),
        ("a", Decimal("5.0"), True, None, None, 1, None),
    ]
    sound, faulty = durations(rows, carry=["plan"])
    assert faulty == []
    assert [tuple(row.values()) for row in sound] == [
        ("a", 1, None, None, 0, 5, 1, "unknown", 1.0, None),
        ("a", 2, None, None, 0, 7, 0, None, 1.5, "blue"),
        ("a", 3, None, None, 4, 9, 1, "cost", 2.0, "red"),
    ]
    assert tuple(sound[0]) == (*SPELL_COLUMNS, "plan")


def test_durations_without_a_subject_are_all_number_1():
    sound, _ = durations([(None, 3, 1), (None, 2, 0)], subject=None, weight=None, cause=None, entry=None)
    assert [(row["subject_id"], row["spell_number"], row["weight"], row["cause"]) for row in sound] == [
        (None, 1, 1, None),
        (None, 1, 1, "event"),
    ]


def test_durations_every_fault_in_order():
    bad = "rubbish"
    rows = [
        (None, None, None, bad, None, None),
        ("a", None, None, bad, None, None),
        ("a", bad, None, bad, None, None),
        ("a", -1.5, None, bad, None, None),
        ("a", 1.5, None, bad, None, None),
        ("a", 3, None, bad, None, None),
        ("a", 3, 2, bad, None, None),
        ("a", 3, 1, bad, None, None),
        ("a", 3, 1, -2, None, None),
        ("a", 3, 1, 3.5, None, None),
        ("a", 3, 1, 4, None, None),
        ("a", 3, 1, 3, None, None),
        ("a", 3, 1, 3, None, bad),
        ("a", 3, 1, 3, None, 0),
        ("a", 3, 1, 3, "fine", 1),
    ]
    sound, faulty = durations(rows)
    assert [row["fault"] for row in faulty] == [
        "no_subject",
        "no_duration",
        "unreadable_duration",
        "negative_duration",
        "duration_not_whole",
        "no_event",
        "unreadable_event",
        "unreadable_entry",
        "negative_entry",
        "entry_not_whole",
        "entry_after_duration",
        "no_weight",
        "unreadable_weight",
        "weight_not_positive",
    ]
    assert [row["cause"] for row in sound] == ["fine"]
    assert tuple(faulty[2][name] for name in FAULTY_COLUMNS[:4]) == ("a", bad, bad, None)


# No builder ever loses a row


readable_days = st.integers(1, 28).map(day)
any_moment = st.one_of(
    readable_days,
    readable_days,
    st.integers(1, 28).map(lambda n: f"{day(n)} 12:00:00"),
    st.sampled_from([None, "rubbish", "2024-02-09"]),
)
subjects = st.sampled_from(["a", "b", "c", None])
units = st.sampled_from(["day", "week", "month", "hour", "minute"])
observed = st.sampled_from([None, day(5), day(15)])


def lengths_hold(sound):
    return all(0 <= row["entry"] <= row["duration"] and row["event"] in (0, 1) for row in sound)


def numbers_count_up(sound):
    by_subject = {}
    for row in sound:
        by_subject.setdefault(row["subject_id"], []).append(row)
    return all(
        [row["spell_number"] for row in own] == list(range(1, len(own) + 1))
        and all(one["started_at"] <= other["started_at"] for one, other in itertools.pairwise(own))
        for own in by_subject.values()
    )


def accounted_for(count, sound, faulty):
    return sum(row["source_rows"] for row in sound) + len(faulty) == count


@given(
    st.lists(st.tuples(subjects, any_moment, any_moment, st.sampled_from(["x", "y", None])), max_size=12),
    st.sampled_from([("merge", 0), ("merge", 3), ("keep", 0), ("refuse", 0)]),
    units,
    observed,
)
@settings(max_examples=150, deadline=None)
def test_no_interval_is_lost(rows, how, unit, observe_from):
    options = {"overlaps": how[0], "grace": how[1], "unit": unit, "observe_from": observe_from}
    sound, faulty = intervals(rows, as_of=day(20), **options)
    assert accounted_for(len(rows), sound, faulty)
    assert lengths_hold(sound)
    assert numbers_count_up(sound)


@given(
    st.lists(
        st.tuples(subjects, any_moment, st.sampled_from(["join", "leave", "lapse", "odd", None])), max_size=15
    ),
    st.sampled_from([0, 2]),
    units,
    observed,
)
@settings(max_examples=150, deadline=None)
def test_no_logged_row_is_lost(rows, grace, unit, observe_from):
    sound, faulty = log(rows, as_of=day(20), grace=grace, unit=unit, observe_from=observe_from)
    assert accounted_for(len(rows), sound, faulty)
    assert lengths_hold(sound)
    assert numbers_count_up(sound)


@given(
    st.lists(st.tuples(subjects, any_moment, st.sampled_from(["active", "trial", "off", None])), max_size=15),
    st.sampled_from(["changes", "snapshots"]),
    st.sampled_from([0, 2]),
    units,
    observed,
)
@settings(max_examples=150, deadline=None)
def test_no_status_is_lost(rows, shape, grace, unit, observe_from):
    options = {"shape": shape, "grace": grace, "unit": unit, "observe_from": observe_from}
    sound, faulty = statuses(rows, as_of=day(20), cause="status", **options)
    assert accounted_for(len(rows), sound, faulty)
    assert lengths_hold(sound)
    assert numbers_count_up(sound)


@given(
    st.lists(st.tuples(subjects, any_moment), max_size=15),
    st.sampled_from(["silence", "last_activity"]),
    units,
    observed,
)
@settings(max_examples=150, deadline=None)
def test_no_activity_is_lost(rows, ends_at, unit, observe_from):
    options = {"ends_at": ends_at, "unit": unit, "observe_from": observe_from}
    sound, faulty = activity(rows, lapse_after=3, as_of=day(20), **options)
    assert accounted_for(len(rows), sound, faulty)
    assert lengths_hold(sound)
    assert numbers_count_up(sound)


@given(
    st.lists(st.tuples(subjects, any_moment), max_size=8),
    st.lists(st.tuples(subjects, any_moment, st.sampled_from(["saw", "rake", None])), max_size=10),
    units,
    observed,
)
@settings(max_examples=150, deadline=None)
def test_no_origin_and_no_event_is_lost(origins, events, unit, observe_from):
    options = {"cause": "tool", "unit": unit, "observe_from": observe_from}
    sound, faulty = first_event(origins, events, as_of=day(20), **options)
    assert accounted_for(len(origins) + len(events), sound, faulty)
    assert lengths_hold(sound)
    assert numbers_count_up(sound)
