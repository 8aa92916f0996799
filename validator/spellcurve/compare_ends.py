"""Recompute what the macros for several causes, recurrent events and states publish.

``Recomputed`` gives the rows that a call should have, from its provenance and from what it reads; compare
them with ``compare_readouts.compare_readouts``. Spells are added up by the warehouse. Single rows come over
the wire only where the figures depend on who is who: events and their spells, and histories of states.

Short tables are recomputed in exact fractions. In long ones sums keep ``DIGITS`` significant digits, some
sixty more than a double can show.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from datetime import datetime
from decimal import Context, Decimal, localcontext
from fractions import Fraction
from typing import Any

from scipy.stats import chi2

from spellcurve import exact_comparisons, exact_incidence
from spellcurve.compare_readouts import Table
from spellcurve.exact import (
    SUMMED_WEIGHT,
    Spell,
    as_spell,
    check_durations,
    is_whole,
    normal_quantile,
    to_decimal,
)
from spellcurve.exact_incidence import History, StateCourse, Unit
from spellcurve.provenance import Provenance
from spellcurve.rebuild import completed_units, read_moment, read_number

#: Columns which, beside those of ``by``, tell the rows of a table apart.
KEYS: dict[str, tuple[str, ...]] = {
    "cumulative_incidence": ("cause", "duration"),
    "incidence_at": ("cause", "duration"),
    "incidence_hazards": ("cause", "duration"),
    "incidence_stacked": ("duration", "part"),
    "incidence_gray_test": (),
    "incidence_log_rank_test": ("comparison",),
    "actuarial_table": ("from_duration",),
    "mean_cumulative_count": ("duration",),
    "difference_in_mean_count": ("group_a", "duration"),
    "state_shares": ("state", "duration"),
}
#: What can be asked for its refused rows, too.
REFUSING = ("mean_cumulative_count", "state_shares")
#: Figures that are differences of larger numbers, or can be a rounding away from 0.
DIFFERENCES = (
    "incidence_lower",
    "incidence_upper",
    "share",
    "share_from",
    "share_to",
    "mean_count_lower",
    "difference",
    "difference_lower",
    "difference_upper",
    "statistic",
)

DIGITS = 80
_SHORT = 40
_PRECISION = 60

Row = dict[str, Any]
#: Runs a select in which ``{source}`` stands for a relation: (relation, select) to rows by column.
Read = Callable[[str, str], list[Row]]


def quoted(name: str) -> str:
    """A column's name as standard SQL quotes it."""
    return '"' + name.replace('"', '""') + '"'


class Recomputed:
    """The rows that calls of these macros should give, each table computed once.

    Args:
        read: pulls rows, see ``Read``; names of columns come back in lower case.
        column: writes a column's name in the warehouse's SQL.
        made_by: relation to the provenance of the call that makes it, if one of these macros does; a read-out
            of another relation is recomputed from the rows in it.
    """

    def __init__(
        self,
        read: Read,
        column: Callable[[str], str] = quoted,
        made_by: Callable[[str], Provenance | None] = lambda relation: None,
    ) -> None:
        self.read = read
        self.column = column
        self.made_by = made_by
        self._rows: dict[str, list[Row]] = {}

    def table(self, provenance: Provenance) -> Table:
        """The figures of every row, by the values of ``names(provenance)``."""
        keys = names(provenance)
        return {
            tuple(row[name] for name in keys): {
                name: figure for name, figure in row.items() if name not in keys
            }
            for row in self.rows(provenance)
        }

    def rows(self, provenance: Provenance) -> list[Row]:
        """Every row of the table, with all its columns.

        Raises:
            ValueError: the macro is not among ``KEYS``, or what it reads is not sound.
        """
        if provenance.macro not in KEYS:
            raise ValueError(f"{provenance.macro} is recomputed elsewhere; give one of {', '.join(KEYS)}.")
        if provenance.options.get("rows", "sound") != "sound":
            raise ValueError(f"These are refused rows of {provenance.macro}; ask for them with refused().")
        call = repr(provenance)
        if call not in self._rows:
            self._rows[call] = getattr(self, f"_{provenance.macro}")(provenance)
        return self._rows[call]

    def refused(self, provenance: Provenance) -> list[Row]:
        """The rows that a call with rows='faulty' should give, as often as each occurs, without detail."""
        if provenance.macro == "state_shares":
            changes = [row for row in self._changes_of_state(provenance) if row["fault"]]
            given = {"given_time": "effective", "given_status": "status"}
            return _refused(changes, given)
        _, events = self._placed_events(provenance)
        refused = [event for event in events if event["fault"] for _ in range(event["events"])]
        return _refused(refused, {"given_time": "happened"})

    # What calls read

    def _pulled(self, relation: str, expressions: Mapping[str, str], added_up: str = "") -> list[Row]:
        """Rows of a relation by aliases of our own; with an aggregate, one for each combination of values."""
        columns = ", ".join(f"{text} as {alias}" for alias, text in expressions.items())
        if not added_up:
            return self.read(relation, f"select {columns} from {{source}}")
        keys = ", ".join(expressions.values())
        return self.read(relation, f"select {columns}, {added_up} from {{source}} group by {keys}")

    def _groups(self, columns: Sequence[str]) -> dict[str, str]:
        return {f"group_{place}": self.column(name) for place, name in enumerate(columns)}

    def spells(self, relation: str, columns: Sequence[str], causes: bool = True) -> list[Spell]:
        """Spells as the warehouse adds them up; the group of each holds the values of these columns."""
        own = ("entry", "duration", "event", "cause") if causes else ("entry", "duration", "event")
        expressions = self._groups(columns) | {name: name for name in own}
        return [
            as_spell(row, _group_of(row, columns), row.get("cause"))
            for row in self._pulled(relation, expressions, SUMMED_WEIGHT)
        ]

    def _rows_of(self, relation: str, macro: str, by: Sequence[str], figures: Sequence[str]) -> list[Row]:
        """The table that a read-out reads: recomputed if it is known how it was made, else as published."""
        made = self.made_by(relation)
        if made is not None and made.macro == macro and made.options.get("rows", "sound") == "sound":
            return self.rows(made)
        keys = KEYS[macro]
        expressions = self._groups(by) | {name: name for name in (*keys, *figures)}
        rows = self._pulled(relation, expressions)
        check_durations(relation, rows)
        return [
            dict(zip(bare(by), _group_of(row, by), strict=True))
            | {name: row[name] for name in keys}
            | {name: _exact(row[name]) for name in figures}
            for row in rows
        ]

    # Several causes

    def _cumulative_incidence(self, provenance: Provenance) -> list[Row]:
        options, by = provenance.options, bare(provenance.by)
        spells = self.spells(str(provenance.spells), provenance.by)
        wanted = _labels(options["causes"])
        if wanted is None:
            causes = {_cause(spell) for spell in spells if spell.event and spell.counts}
            wanted = {cause: cause for cause in causes}
        rows = []
        for group, own in _by_group(spells).items():
            for found in exact_incidence.cumulative_incidence(
                own,
                wanted,
                options["others"],
                options["confidence"],
                options["interval_scale"],
                options["horizon"],
                options["grid"],
                _digits(len({spell.duration for spell in own})),
            ):
                row = dict(zip(by, group, strict=True)) | vars(found)
                del row["variance"]
                if options["others"] == "censored":
                    row["others"] = "censored"
                estimates = ("incidence", "std_error", "incidence_lower", "incidence_upper")
                rows.append(_published(row, ("at_risk", "events"), estimates, row["at_risk"], options))
        return rows

    def _incidences(self, provenance: Provenance) -> list[tuple[Row, list[Row]]]:
        """The incidences that a read-out reads, in groups, rows by cause and duration."""
        figures = ("at_risk", "events", "incidence", "incidence_lower", "incidence_upper")
        rows = self._rows_of(provenance.options["incidence"], "cumulative_incidence", provenance.by, figures)
        return _in_groups(rows, bare(provenance.by), ("cause", "duration"))

    def _incidence_at(self, provenance: Provenance) -> list[Row]:
        rows = []
        for group, own in self._incidences(provenance):
            last = max(row["duration"] for row in own)
            at_end = [row["incidence"] for row in own if row["duration"] == last]
            nobody_left = sum(one for one in at_end if one is not None) >= 1 - Fraction(1, 10**9)
            for cause, curve in _in_groups(own, ("cause",), ("duration",)):
                for wanted in provenance.options["durations"]:
                    found = _incidence_in_force(curve, wanted, nobody_left)
                    rows.append(group | cause | {"duration": wanted} | found)
        return rows

    def _incidence_hazards(self, provenance: Provenance) -> list[Row]:
        rows = []
        for group, own in self._incidences(provenance):
            for cause, curve in _in_groups(own, ("cause",), ("duration",)):
                total, variance, known = Fraction(0), Fraction(0), True
                for row in curve:
                    n, d = row["at_risk"], row["events"]
                    hazard = (
                        None if n is None or d is None else Fraction(d) / Fraction(n) if d else Fraction(0)
                    )
                    known = known and hazard is not None
                    if known and hazard:
                        total = exact_incidence.rounded(total + hazard, DIGITS)
                        variance = exact_incidence.rounded(variance + hazard / Fraction(n), DIGITS)
                    rows.append(
                        group
                        | cause
                        | {
                            "duration": row["duration"],
                            "at_risk": n,
                            "events": d,
                            "hazard": hazard,
                            "cumulative_hazard": total if known else None,
                            "cumulative_hazard_std_error": _root(variance) if known else None,
                        }
                    )
        return rows

    def _incidence_stacked(self, provenance: Provenance) -> list[Row]:
        rows = []
        for group, own in self._incidences(provenance):
            for duration, parts in _in_groups(own, ("duration",), ("cause",)):
                known = all(row["incidence"] is not None for row in parts)
                reached = Fraction(0)
                for row in parts:
                    below = reached
                    reached += row["incidence"] if known else 0
                    rows.append(group | duration | _part(row["cause"], below, reached, known))
                rows.append(group | duration | _part(provenance.options["rest"], reached, Fraction(1), known))
        return rows

    def _segments(self, provenance: Provenance) -> list[tuple[Row, list[Spell]]]:
        """The spells of a comparison for each value of by: the group compared comes first, then strata."""
        options, by = provenance.options, provenance.by
        columns = [*by, options["between"], *options.get("strata", [])]
        segments: dict[tuple[Any, ...], list[Spell]] = {}
        for spell in self.spells(str(provenance.spells), columns):
            own = _regrouped(spell, spell.group[len(by) :])
            segments.setdefault(spell.group[: len(by)], []).append(own)
        return [(dict(zip(bare(by), group, strict=True)), own) for group, own in segments.items()]

    def _incidence_gray_test(self, provenance: Provenance) -> list[Row]:
        causes, most_groups = _listed(provenance.options["causes"]), provenance.options["most_groups"]
        rows = []
        for segment, spells in self._segments(provenance):
            groups = list(_by_group(spells).values())
            row: Row = {"statistic": None, "degrees_of_freedom": None, "p_value": None}
            if len(groups) > most_groups:
                row["status"] = exact_comparisons.TOO_MANY_GROUPS
            elif len(groups) == 1:
                row["status"] = exact_comparisons.ONE_GROUP
            else:
                digits = _digits(len({spell.duration for spell in spells if spell.event}))
                found = exact_incidence.gray_test(groups, causes, digits)
                if not found.observed:
                    row["status"] = exact_comparisons.NO_EVENTS
                elif found.statistic is None:
                    row["status"] = exact_comparisons.NOTHING_TO_COMPARE
                else:
                    freedom = found.degrees_of_freedom
                    full = freedom == len(groups) - 1
                    row = {
                        "statistic": found.statistic,
                        "degrees_of_freedom": freedom,
                        "p_value": float(chi2.sf(float(found.statistic), freedom)),
                        "status": exact_comparisons.COMPARED if full else exact_comparisons.FEWER_DEGREES,
                    }
            rows.append(segment | row)
        return rows

    def _incidence_log_rank_test(self, provenance: Provenance) -> list[Row]:
        options = provenance.options
        causes = _listed(options["causes"])
        rows = []
        for segment, spells in self._segments(provenance):
            own = [_of_causes(spell, causes) for spell in spells]
            for found in exact_comparisons.log_rank_test(
                own,
                options["weighting"],
                options["pairs"],
                options["reference"],
                options["adjustment"],
                options["confidence"],
                options["most_groups"],
                digits=_digits(len({spell.duration for spell in own if spell.event})),
            ):
                rows.append(segment | vars(found))
        return rows

    def _actuarial_table(self, provenance: Provenance) -> list[Row]:
        options, by = provenance.options, bare(provenance.by)
        rows = []
        spells = self.spells(str(provenance.spells), provenance.by, causes=False)
        for group, own in _by_group(spells).items():
            for found in exact_incidence.actuarial_table(own, options["width"], options["horizon"]):
                row = dict(zip(by, group, strict=True)) | vars(found)
                del row["greenwood_sum"]
                counts = ("entering", "censored", "events")
                estimates = ("hazard_share", "survival", "std_error")
                hidden = row["entering"] < options["minimum_at_risk"]
                rows.append(_published(row, counts, estimates, row["entering"], options))
                if hidden and options["small_counts"] == "hide":
                    rows[-1]["exposed"] = None
        return rows

    # Events that happen more than once

    def _placed_events(self, provenance: Provenance) -> tuple[list[Row], list[Row]]:
        """Spells with the tenures of their events, and events with the fault of those that count nowhere."""
        options = provenance.options
        by_moment, unit = options["happened_as"] == "moment", options["unit"]
        own = ["subject_id", "entry", "duration", "weight"]
        own += ["started_at", "last_seen_at"] if by_moment else []
        spells = self._pulled(
            str(provenance.spells), self._groups(provenance.by) | {name: name for name in own}
        )
        of_subject: dict[Any, list[Row]] = {}
        for spell in spells:
            sound = as_spell(spell | {"event": 0}, _group_of(spell, provenance.by))
            spell |= {"entry": sound.entry, "duration": sound.duration, "weight": sound.weight, "tenures": []}
            if by_moment:
                spell["started"], spell["ended"] = map(
                    read_moment, (spell["started_at"], spell["last_seen_at"])
                )
                if spell["started"] is None or spell["ended"] is None:
                    raise ValueError(
                        f"the spell {spell['subject_id']} has no started_at or no last_seen_at, so no event "
                        "can be placed by its moment; give both, or the events by tenure."
                    )
                spell["order"] = (spell["started"], spell["ended"], spell["duration"])
            else:
                spell["order"] = (spell["entry"], spell["duration"])
            of_subject.setdefault(spell["subject_id"], []).append(spell)
        for spells_of_one in of_subject.values():
            spells_of_one.sort(key=lambda spell: spell["order"])
        columns = {name: self.column(options[name]) for name in ("subject", "happened")}
        events = self._pulled(options["events"], columns, "count(*) as events")
        by_day = unit in ("day", "week", "month")
        for event in events:
            event["events"] = int(event["events"])
            near = of_subject.get(event["subject"], []) if event["subject"] is not None else []
            if by_moment:
                event["fault"], owner, tenure = _at_moment(event, near, unit, by_day)
            else:
                event["fault"], owner, tenure = _at_tenure(event, near)
            if owner is not None:
                owner["tenures"] += [tenure] * event["events"]
        return spells, events

    def _mean_cumulative_count(self, provenance: Provenance) -> list[Row]:
        options, by = provenance.options, bare(provenance.by)
        spells, _ = self._placed_events(provenance)
        units: dict[tuple[Any, ...], dict[Any, tuple[list[tuple[int, int]], list[int], Any]]] = {}
        for place, spell in enumerate(spells):
            subject = (spell["subject_id"], None if spell["subject_id"] is not None else place)
            weight = spell["weight"]
            of_group = units.setdefault(_group_of(spell, by), {})
            unit = of_group.setdefault((subject, weight), ([], [], weight))
            unit[0].append((spell["entry"], spell["duration"]))
            unit[1].extend(spell["tenures"])
        z = normal_quantile(options["confidence"])
        rows = []
        for group, of_group in units.items():
            everyone = [Unit(tuple(own), tuple(events), weight) for own, events, weight in of_group.values()]
            digits = _digits(sum(len(unit.spells) + len(unit.events) for unit in everyone))
            for found in exact_incidence.mean_cumulative_count(
                everyone, options["horizon"], options["grid"], digits
            ):
                variance = found.robust_variance if options["variance"] == "robust" else found.naive_variance
                row = dict(zip(by, group, strict=True)) | {
                    "duration": found.duration,
                    "at_risk": found.at_risk,
                    "events": found.events,
                    "mean_count": found.mean_count,
                }
                row |= _count_uncertainty(found.mean_count, variance, z, options["interval_scale"])
                estimates = ("mean_count", "std_error", "mean_count_lower", "mean_count_upper")
                rows.append(_published(row, ("at_risk", "events"), estimates, row["at_risk"], options))
        return rows

    def _difference_in_mean_count(self, provenance: Provenance) -> list[Row]:
        options = provenance.options
        between = bare([options["between"]])[0]
        counts = self._rows_of(
            options["counts"],
            "mean_cumulative_count",
            [*provenance.by, options["between"]],
            ("mean_count", "std_error"),
        )
        z = normal_quantile(options["confidence"])
        rows = []
        for segment, own in _in_groups(counts, bare(provenance.by), ("duration",)):
            curves = [(group[between], curve) for group, curve in _in_groups(own, (between,), ("duration",))]
            for wanted in options["durations"]:
                stands = [(value, _count_in_force(curve, wanted)) for value, curve in curves]
                reference = next(
                    (found for value, found in stands if _as_text(value) == str(options["reference"])), None
                )
                for value, found in stands:
                    if found is not reference:
                        place = {"group_a": _as_text(value), "group_b": str(options["reference"])}
                        figures = _difference(found, reference, z)
                        rows.append(segment | place | {"duration": wanted} | figures)
        return rows

    # States

    def _changes_of_state(self, provenance: Provenance) -> list[Row]:
        """The rows of the history, each with its fault, with its moment and that of its origin."""
        options = provenance.options
        wanted = ("subject", "effective", "status", "origin", "sequence", "recorded_at")
        columns = {name: self.column(options[name]) for name in wanted if options.get(name)}
        rows = self._pulled(options["relation"], self._groups(provenance.by) | columns)
        known_at = read_moment(options["as_of"])
        by_day = options["unit"] in ("day", "week", "month")
        for row in rows:
            row["status"] = _as_text(row["status"])
            row["fault"] = _fault_of_change(row, options, known_at, by_day)
        at_moment: dict[Any, set[str]] = {}
        for row in rows:
            if row["fault"] is None:
                row["place"] = (row["subject"], row["moment"], row.get("sequence"))
                at_moment.setdefault(row["place"], set()).add(row["status"])
        for row in rows:
            if row["fault"] is None and len(at_moment[row["place"]]) > 1:
                row["fault"] = "conflicting_status"
        return rows

    def _state_shares(self, provenance: Provenance) -> list[Row]:
        options, by, states = provenance.options, bare(provenance.by), provenance.options["states"]
        of_subject: dict[Any, list[Row]] = {}
        for row in self._changes_of_state(provenance):
            if row["fault"] is None:
                of_subject.setdefault(row["subject"], []).append(row)
        groups: dict[tuple[Any, ...], list[History]] = {}
        for own in of_subject.values():
            own.sort(
                key=lambda row: (
                    row["moment"],
                    *_nulls_first(row.get("sequence")),
                    -states.index(row["status"]),
                )
            )
            groups.setdefault(_group_of(own[0], by), []).append(_history(own, options))
        rows = []
        for group, histories in groups.items():
            course = StateCourse(histories, states)
            places = {t: place for place, t in enumerate(sorted({0, *course.begins, *course.ends}), start=1)}
            reach = _products_reach(options["most_durations"], options["horizon"])
            last_place = 1
            for found in exact_incidence.state_shares(
                histories, states, options["horizon"], options["grid"], _digits(len(places))
            ):
                last_place = places.get(found.duration, last_place)
                row = dict(zip(by, group, strict=True)) | vars(found)
                if last_place > reach:
                    row["share"] = None
                all_at_risk = sum(course.at_risk(state, found.duration) for state in states)
                counts = ("at_risk", "arrivals", "departures")
                rows.append(_published(row, counts, ("share",), all_at_risk, options))
        return rows


def _refused(rows: Sequence[Row], given: Mapping[str, str]) -> list[Row]:
    """Refused rows; what is not text comes without the text that the warehouse makes of it in its own way."""
    told = {
        name: source
        for name, source in given.items()
        if all(row[source] is None or isinstance(row[source], str) for row in rows)
    }
    return [
        {"subject_id": row["subject"]}
        | {name: row[source] for name, source in told.items()}
        | {"fault": row["fault"]}
        for row in rows
    ]


def names(provenance: Provenance) -> tuple[str, ...]:
    """The columns that tell the rows of a call's table apart."""
    return (*bare(provenance.by), *KEYS[provenance.macro])


def bare(columns: Iterable[str]) -> tuple[str, ...]:
    """Column names as a query gives them: without quotes, in lower case."""
    return tuple(name.strip('"`[]').lower() for name in columns)


# Small things


def _digits(length: int) -> int | None:
    return None if length <= _SHORT else DIGITS


def _exact(value: Any) -> Any:
    """A published figure as a fraction; null and what is no number stay as they are."""
    return Fraction(value) if isinstance(value, float | Decimal) and value == value else value


def _root(variance: Fraction) -> float:
    with localcontext(Context(prec=_PRECISION)):
        return float(to_decimal(variance).sqrt())


def _group_of(row: Mapping[str, Any], columns: Sequence[str]) -> tuple[Any, ...]:
    return tuple(row[f"group_{place}"] for place in range(len(columns)))


def _by_group(spells: Iterable[Spell]) -> dict[tuple[Any, ...], list[Spell]]:
    groups: dict[tuple[Any, ...], list[Spell]] = {}
    for spell in spells:
        groups.setdefault(spell.group, []).append(spell)
    return groups


def _in_groups(rows: Iterable[Row], by: Sequence[str], order: Sequence[str]) -> list[tuple[Row, list[Row]]]:
    """Sort rows into groups of equal values, each in the order of other columns."""
    groups: dict[tuple[Any, ...], list[Row]] = {}
    for row in rows:
        groups.setdefault(tuple(row[name] for name in by), []).append(row)
    return [
        (dict(zip(by, group, strict=True)), sorted(own, key=lambda row: tuple(row[name] for name in order)))
        for group, own in groups.items()
    ]


def _regrouped(spell: Spell, group: tuple[Any, ...]) -> Spell:
    return Spell(spell.entry, spell.duration, spell.event, spell.weight, spell.cause, group)


def _cause(spell: Spell) -> str:
    return "unknown" if spell.cause is None else spell.cause


def _of_causes(spell: Spell, causes: Sequence[str]) -> Spell:
    """The spell with every other cause as censoring."""
    event = int(bool(spell.event) and _cause(spell) in causes)
    return Spell(spell.entry, spell.duration, event, spell.weight, None, spell.group)


def _listed(value: Any) -> list[Any]:
    return [value] if isinstance(value, str) or not isinstance(value, Sequence) else list(value)


def _labels(causes: Any) -> dict[str, str] | None:
    """What the option causes may be, as a mapping from cause to label."""
    if causes is None or isinstance(causes, dict):
        return causes
    return {cause: cause for cause in _listed(causes)}


def _as_text(value: Any) -> str | None:
    return None if value is None else str(value)


def _published(
    row: Row, counts: Sequence[str], estimates: Sequence[str], at_risk: Any, options: Mapping[str, Any]
) -> Row:
    """Blank out what the published table does not show: small groups, and counts that are not whole."""
    hidden: list[str] = []
    if at_risk < options["minimum_at_risk"]:
        hidden += estimates
        if options["small_counts"] == "hide":
            hidden += counts
    if options.get("weights") == "whole":
        hidden += [name for name in counts if not is_whole(row[name])]
    return row | dict.fromkeys(hidden)


def _incidence_in_force(curve: Sequence[Row], wanted: int, nobody_left: bool) -> Row:
    """One cause of one group at a duration, or why it is not known there."""
    figures = ("incidence", "incidence_lower", "incidence_upper")
    before = [row for row in curve if row["duration"] <= wanted]
    after = [row for row in curve if row["duration"] > wanted]
    at_risk: Any = None
    if before and before[-1]["duration"] == wanted:
        at_risk = before[-1]["at_risk"]
    elif after:
        at_risk = after[0]["at_risk"]
    elif nobody_left:
        at_risk = Fraction(0)
    if len({row["duration"] for row in curve}) < len(curve):
        status = "several_curves"
    elif not before or (wanted > curve[-1]["duration"] and not nobody_left):
        status = "beyond_follow_up"
    elif before[-1]["incidence"] is None or (
        before[-1]["duration"] < wanted and after and after[0]["incidence"] is None
    ):
        status = "too_few_at_risk"
    else:
        status = "observed"
    row = {name: before[-1][name] if status == "observed" else None for name in figures}
    return row | {
        "at_risk": at_risk if status in ("observed", "too_few_at_risk") else None,
        "status": status,
    }


def _part(part: str, below: Fraction, above: Fraction, known: bool) -> Row:
    figures = (above - below, below, above) if known else (None, None, None)
    return {"part": part} | dict(zip(("share", "share_from", "share_to"), figures, strict=True))


def _at_moment(
    event: Row, spells: Sequence[Row], unit: str, by_day: bool
) -> tuple[str | None, Row | None, int]:
    """Find the spell that an event belongs to: the last of its subject that started at or before it."""
    fault = _unreadable(event["subject"], event["happened"], "subject", "time", read_moment)
    if fault:
        return fault, None, 0
    moment = read_moment(event["happened"])
    assert moment is not None
    if by_day:
        moment = datetime(moment.year, moment.month, moment.day)
    spell = next((one for one in reversed(spells) if one["started"] <= moment), None)
    if spell is None or moment > spell["ended"]:
        return "no_spell", None, 0
    return _within(spell, completed_units(spell["started"], moment, unit))


def _at_tenure(event: Row, spells: Sequence[Row]) -> tuple[str | None, Row | None, int]:
    fault = _unreadable(event["subject"], event["happened"], "subject", "time", read_number)
    if fault:
        return fault, None, 0
    reading = read_number(event["happened"])
    assert reading is not None
    if reading < 0 or reading != int(reading):
        return "unreadable_time", None, 0
    if len(spells) > 1:
        return "several_spells", None, 0
    return _within(spells[0], int(reading)) if spells else ("no_spell", None, 0)


def _within(spell: Row, tenure: int) -> tuple[str | None, Row | None, int]:
    if tenure > spell["duration"]:
        return "no_spell", None, 0
    if 0 < spell["entry"] >= tenure:
        return "before_observation", None, 0
    return None, spell, tenure


def _unreadable(
    subject: Any, value: Any, subject_name: str, value_name: str, reader: Callable[[Any], Any]
) -> str | None:
    if subject is None:
        return f"no_{subject_name}"
    return _reading_fault(value, value_name, reader)


def _reading_fault(value: Any, name: str, reader: Callable[[Any], Any]) -> str | None:
    if value is None:
        return f"no_{name}"
    try:
        reader(value)
    except ValueError:
        return f"unreadable_{name}"
    return None


def _count_uncertainty(mean: Fraction, variance: Fraction, z: Decimal, scale: str) -> Row:
    """Standard error and interval: 0 at a mean of 0, nothing where subjects do not differ at all."""
    columns = ("std_error", "mean_count_lower", "mean_count_upper")
    if mean == 0:
        return dict.fromkeys(columns, 0.0)
    if variance <= mean**2 / 10 ** (DIGITS // 2):  # what rounding may leave of 0
        return dict.fromkeys(columns)
    with localcontext(Context(prec=_PRECISION)):
        error, middle = to_decimal(variance).sqrt(), to_decimal(mean)
        if scale == "log":
            factor = (z * error / middle).exp()
            bounds = middle / factor, middle * factor
        else:
            bounds = max(Decimal(0), middle - z * error), middle + z * error
        return dict(zip(columns, map(float, (error, *bounds)), strict=True))


def _count_in_force(curve: Sequence[Row], wanted: int) -> Row:
    """The mean count of a group at a duration, and whether the group was followed that long."""
    before = [row for row in curve if row["duration"] <= wanted]
    row = before[-1] if before else curve[0]
    followed = bool(before) and (row["duration"] == wanted or curve[-1]["duration"] > wanted)
    return {"mean": row["mean_count"], "error": row["std_error"], "followed": followed}


def _difference(a: Row, b: Row | None, z: Decimal) -> Row:
    """Compare the mean counts of two groups, or say why not."""
    columns = (
        "mean_count_a",
        "mean_count_b",
        "difference",
        "std_error",
        "difference_lower",
        "difference_upper",
        "p_value",
        "ratio",
        "ratio_lower",
        "ratio_upper",
    )
    row: Row = dict.fromkeys(columns)
    if b is None:
        return row | {"status": "reference_not_found"}
    if not (a["followed"] and b["followed"]):
        return row | {"status": "beyond_follow_up"}
    if a["mean"] is None or b["mean"] is None:
        return row | {"status": "too_few_at_risk"}
    mean_a, mean_b = Fraction(a["mean"]), Fraction(b["mean"])
    difference, ratio = mean_a - mean_b, mean_a / mean_b if mean_b else None
    row |= {"mean_count_a": mean_a, "mean_count_b": mean_b, "difference": difference, "ratio": ratio}
    if a["error"] is None or b["error"] is None:
        return row | {"status": "no_std_error"}
    error_a, error_b = Fraction(a["error"]), Fraction(b["error"])
    variance = error_a**2 + error_b**2
    with localcontext(Context(prec=_PRECISION)):
        error = to_decimal(variance).sqrt()
        reach = Fraction(z * error)
        row |= {
            "std_error": float(error),
            "difference_lower": difference - reach,
            "difference_upper": difference + reach,
        }
        if variance:
            row["p_value"] = float(chi2.sf(float(difference**2 / variance), 1))
        if ratio:
            relative = to_decimal((error_a / mean_a) ** 2 + (error_b / mean_b) ** 2).sqrt()
            factor = (z * relative).exp()
            row["ratio_lower"] = float(to_decimal(ratio) / factor)
            row["ratio_upper"] = float(to_decimal(ratio) * factor)
    return row | {"status": "compared"}


def _fault_of_change(
    row: Row, options: Mapping[str, Any], known_at: datetime | None, by_day: bool
) -> str | None:
    """Find the first thing wrong with a row of a history; its moments are added to the row."""
    assert known_at is not None
    if options.get("recorded_at") and row["recorded_at"] is not None:
        if _reading_fault(row["recorded_at"], "recorded_at", read_moment):
            return "unreadable_recorded_at"
        recorded = read_moment(row["recorded_at"])
        if recorded is not None and recorded > known_at:
            return "recorded_after_as_of"
    if row["subject"] is None:
        return "no_subject"
    if options["origin"] and (fault := _reading_fault(row["origin"], "origin", read_moment)):
        return fault
    if fault := _reading_fault(row["effective"], "time", read_moment):
        return fault
    moment = read_moment(row["effective"])
    assert moment is not None
    row["moment"] = moment
    if moment > known_at:
        return "after_as_of"
    row["began"] = read_moment(row["origin"]) if options["origin"] else moment
    if _is_before(moment, row["began"], by_day):
        return "before_origin"
    if row["status"] is None:
        return "no_status"
    return None if row["status"] in options["states"] else "unknown_status"


def _is_before(one: datetime, other: datetime, by_day: bool) -> bool:
    return one.date() < other.date() if by_day else one < other


def _nulls_first(value: Any) -> tuple[Any, ...]:
    return (0, 0) if value is None else (1, value)


def _history(own: Sequence[Row], options: Mapping[str, Any]) -> History:
    """A subject's rows, in order, as turns at tenures; of several at one tenure the last counts."""
    unit, known_at = options["unit"], read_moment(options["as_of"])
    origin = min(row["began"] for row in own)
    assert known_at is not None
    turns = {completed_units(origin, row["moment"], unit): row["status"] for row in own}
    observed_from = read_moment(options["observe_from"])
    late = observed_from is not None and origin < observed_from
    entry = completed_units(origin, observed_from, unit) if late and observed_from is not None else 0
    return History(tuple(sorted(turns.items())), completed_units(origin, known_at, unit), entry)


def _products_reach(most_durations: int, horizon: int | None) -> int:
    """How many durations of a group the SQL is prepared for: a power of 2."""
    wanted = most_durations if horizon is None else min(most_durations, horizon + 1)
    return 1 << max(0, wanted - 1).bit_length()
