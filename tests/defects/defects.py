"""The deliberate defects: mistakes that are easily made in these macros, which still compile and run."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from defects.project import Defect


@dataclass(frozen=True)
class Tampering:
    """A table that is not what its model's SQL gives, though no macro is wrong.

    Attributes:
        name: what is wrong.
        models: to build; each is then to be found stale.
        done, undone: SQL before the check and after it.
        built_with: variables that the models are built with; they are checked without.
        said: a part of the note on each model.
    """

    name: str
    models: tuple[str, ...]
    done: tuple[str, ...] = ()
    undone: tuple[str, ...] = ()
    built_with: dict[str, Any] = field(default_factory=dict)
    said: str = "build it again"


def _in(file: str, *listed: tuple[str, str, str, str]) -> list[Defect]:
    """Defects of one file: what is wrong, the right text, the wrong one, the models that show it."""
    return [Defect(name, file, old, new, tuple(models.split())) for name, old, new, models in listed]


DEFECTS = [
    # Who is at risk
    *_in(
        "numerics/risk_sets.sql",
        (
            "late entry is forgotten",
            "sum(leaving - entered) over (",
            "sum(leaving) over (",
            "curve",
        ),
        (
            "those who end at a duration are no longer at risk at it",
            "order by duration desc rows between unbounded preceding and current row",
            "order by duration desc rows between unbounded preceding and 1 preceding",
            "curve",
        ),
        (
            "at risk is counted forwards, from the shortest duration",
            "order by duration desc rows between",
            "order by duration rows between",
            "curve",
        ),
        (
            "the censored are all who end",
            "leaving - events as censored",
            "leaving as censored",
            "curve",
        ),
        (
            "a count of weights is rounded",
            "'case when floor(' ~ expression ~ ') = ' ~ expression ~ ' then ' ~ expression ~ ' end'",
            "'floor(' ~ expression ~ ' / 2) * 2'",
            "curve",
        ),
    ),
    *_in(
        "dialect/changes.sql",
        (
            "who enters at the end of the spell is counted",
            "not (entry > 0 and entry >= duration)",
            "not (entry > 0 and entry > duration)",
            "curve",
        ),
        (
            "spells of duration 0 are left out",
            "where duration is not null and not (entry > 0 and entry >= duration)",
            "where entry < duration",
            "curve",
        ),
        (
            "late entry is at the end of the spell",
            "case when entry < duration then {{ latest }} else 0 end as duration",
            "case when entry < duration then duration else 0 end as duration",
            "curve",
        ),
        (
            "who enters at a duration is at risk at it",
            "case when entry < duration then {{ latest }} else 0 end as duration",
            "case when entry < duration then {{ latest }} - 1 else 0 end as duration",
            "curve",
        ),
        (
            "a group that was never at risk is lost",
            "    where entry > 0 or entry is null",
            "    where entry < duration and entry > 0 or entry is null",
            "curve_after_end",
        ),
        (
            "who was never at risk is counted as entering at 0",
            "case when entry < duration then {{ spellcurve._double('weight') }} else 0 end as entered",
            "{{ spellcurve._double('weight') }} as entered",
            "curve",
        ),
        (
            "weights are dropped",
            "entry, duration, event, weight\n",
            "entry, duration, event, 1e0 as weight\n",
            "curve",
        ),
        (
            "censored spells are counted as events too",
            "coalesce(sum({{ spellcurve._double('event = 1') }} * weight), 0) as events",
            "sum(weight) as events",
            "curve",
        ),
        (
            "the group without a value is lost",
            "event, weight\n    from {{ spells }}\n",
            "event, weight\n    from {{ spells }}\n    where {{ keys[0] if keys else 1 }} is not null\n",
            "curve",
        ),
        (
            "the group without a value enters apart from its spells",
            "leaving.{{ group }} is not distinct from entering.{{ group }} and ",
            "leaving.{{ group }} = entering.{{ group }} and ",
            "curve",
        ),
        (
            "who enters late does so once for each cause",
            "{%- if 'own_cause' in names %} and leaving.own_cause is null{% endif %}",
            "",
            "incidence",
        ),
        (
            "late entries are lost where nobody ends",
            "full join entering",
            "left join entering",
            "curve",
        ),
        (
            "no curve has its row at 0",
            "0 as duration, 0 as entered\n    from leaving\n",
            "0 as duration, 0 as entered\n    from leaving\n    where duration = 0\n",
            "curve",
        ),
        (
            "durations of entries are steps too",
            "not in (0{% if horizon is not none %}, {{ horizon }}{% endif %}) then 0",
            "not in (0{% if horizon is not none %}, {{ horizon }}{% endif %}) then 1",
            "curve",
        ),
        (
            "events just beyond the horizon are counted at the horizon",
            "case when duration <= ' ~ horizon ~ ' then duration when entry",
            "case when duration <= ' ~ (horizon + 1) ~ ' then least(duration, ' ~ horizon ~ ') when entry",
            "curve_log",
        ),
        (
            "the row at the horizon is nobody's step",
            "not in (0{% if horizon is not none %}, {{ horizon }}{% endif %}) then 0",
            "not in (0) then 0",
            "curve_log",
        ),
    ),
    *_in(
        "numerics/repeated_rows.sql",
        (
            "the grid lacks the last unit before a step",
            "on {{ parts[:digits - power] | join(' + ') }} < {{ times }}",
            "on {{ parts[:digits - power] | join(' + ') }} < greatest(1, {{ times }} - 1)",
            "curve_linear",
        ),
    ),
    # Survival and its intervals
    *_in(
        "estimates/survival_curve.sql",
        (
            "hazards are whole numbers",
            "case when at_risk > 0 then events / at_risk else 0 end as hazard",
            "case when at_risk > 0 then floor(events / at_risk) else 0 end as hazard",
            "curve",
        ),
        (
            "censoring comes before events",
            "case when at_risk > 0 then events / at_risk else 0 end as hazard,",
            "case when at_risk > 0 then events / (at_risk - censored) else 0 end as hazard,",
            "curve",
        ),
        (
            "the variance divides by n times n",
            "hazard / (at_risk - events) else 0 end as greenwood_step",
            "hazard / at_risk else 0 end as greenwood_step",
            "curve",
        ),
        (
            "the step itself is left out of the running sums",
            "order by duration rows between unbounded preceding and current row' %}",
            "order by duration rows between unbounded preceding and 1 preceding' %}",
            "curve",
        ),
        (
            "the sums run over all groups",
            "set so_far = partition ~ 'order by duration rows",
            "set so_far = 'order by duration rows",
            "curve",
        ),
        (
            "the cumulative hazard comes from the logarithm of survival",
            "sum(hazard) over ({{ so_far }}) as cumulative_hazard",
            "0 - sum(log_step) over ({{ so_far }}) as cumulative_hazard",
            "curve",
        ),
        (
            "the variance of the cumulative hazard is Greenwood's",
            "hazard / at_risk else 0 end as hazard_variance_step",
            "hazard / greatest(1, at_risk - events) else 0 end as hazard_variance_step",
            "curve",
        ),
        (
            "std_error is not multiplied by survival",
            "case stage when 1 then survival * relative_error",
            "case stage when 1 then relative_error",
            "curve",
        ),
        (
            "bounds are swapped",
            "'log_survival', reach, z, -1) }}",
            "'log_survival', reach, z, 1) }}",
            "curve",
        ),
        (
            "the interval is one-sided",
            "spellcurve._normal_quantile(0.5 + confidence / 2)",
            "spellcurve._normal_quantile(confidence)",
            "curve",
        ),
        (
            "the confidence asked for is ignored",
            "spellcurve._normal_quantile(0.5 + confidence / 2)",
            "spellcurve._normal_quantile(0.975)",
            "curve_arcsine",
        ),
        (
            "the horizon is left out of the rows",
            "where is_step = 1{% if horizon is not none %} and duration <= {{ horizon }}{% endif %}",
            "where is_step = 1{% if horizon is not none %} and duration < {{ horizon }}{% endif %}",
            "curve_log",
        ),
        (
            "the horizon is dropped from the grid",
            "where duration + units_on <= {{ horizon }}",
            "where duration + units_on >= 0",
            "curve_logit",
        ),
        (
            "between two steps the number at risk is that of the earlier",
            "case when units_on = 0 then at_risk else next_at_risk end as at_risk",
            "at_risk",
            "curve_linear",
        ),
        (
            "the events of a step are repeated until the next",
            "case when units_on = 0 then events else 0 end as events",
            "events",
            "curve_linear",
        ),
        (
            "the last row is carried forward beyond follow-up",
            "'coalesce(next_duration, duration + 1) - duration'",
            "'coalesce(next_duration, duration + 3) - duration'",
            "curve_linear",
        ),
    ),
    *_in(
        "estimates/_published_columns.sql",
        (
            "minimum_at_risk is ignored",
            "(enough ~ figure ~ ' end' if minimum_at_risk > 0 else figure) ~ ' as ' ~ name",
            "figure ~ ' as ' ~ name",
            "curve_of_many",
        ),
        (
            "one too few at risk are enough",
            "at_risk ~ ' >= ' ~ minimum_at_risk ~ ' then '",
            "at_risk ~ ' > ' ~ minimum_at_risk ~ ' then '",
            "curve_of_many",
        ),
        (
            "small counts are not hidden",
            "enough ~ count ~ ' end' if small_counts == 'hide' and minimum_at_risk > 0 else count",
            "count",
            "curve_hiding_few",
        ),
    ),
    *_in(
        "numerics/intervals.sql",
        (
            "a step that takes everyone leaves survival as it was",
            "when takes_all = 1 then {{ spellcurve._log_of_nothing_left() }}",
            "when takes_all = 1 then 0",
            "curve_after_end",
        ),
        (
            "the linear interval does not grow with survival",
            "survival ~ ' * (1 + ' ~ forth ~ ')))'",
            "survival ~ ' + ' ~ forth ~ '))'",
            "curve_linear",
        ),
        (
            "the linear interval leaves the range from 0 to 1",
            "'least(1, greatest(0, ' ~ survival ~ ' * (1 + ' ~ forth ~ ')))'",
            "survival ~ ' * (1 + ' ~ forth ~ ')'",
            "curve_linear",
        ),
        (
            "the log interval is that of std_error",
            "survival ~ ' * ' ~ spellcurve._exp(forth, side)",
            "survival ~ ' * ' ~ spellcurve._exp(forth ~ ' * ' ~ survival, side)",
            "curve_log",
        ),
        (
            "the log-log interval has lost the logarithm of survival",
            "spellcurve._exp(back ~ ' / (0 - ' ~ log_survival ~ ')', 0 - side)",
            "spellcurve._exp(back, 0 - side)",
            "curve",
        ),
        (
            "the log-log interval has the larger factor above",
            "spellcurve._exp(back ~ ' / (0 - ' ~ log_survival ~ ')', 0 - side)",
            "spellcurve._exp(forth ~ ' / (0 - ' ~ log_survival ~ ')', side)",
            "curve",
        ),
        (
            "the logit interval divides by survival too",
            "spellcurve._exp(back ~ ' / (1 - ' ~ survival ~ ')', 0 - side)",
            "spellcurve._exp(back ~ ' / (' ~ survival ~ ' * (1 - ' ~ survival ~ '))', 0 - side)",
            "curve_logit",
        ),
        (
            "the arcsine interval is twice as wide",
            "~ survival ~ ')) / 2'",
            "~ survival ~ '))'",
            "curve_arcsine",
        ),
        (
            "the arcsine interval turns back at its ends",
            "'least(' ~ half_pi ~ ', greatest(0, ' ~ angle ~ '))'",
            "'(' ~ angle ~ ')'",
            "curve_arcsine",
        ),
        (
            "the log interval leaves the range from 0 to 1",
            "'least(1, ' ~ survival ~ ' * ' ~ spellcurve._exp(forth, side) ~ ')'",
            "survival ~ ' * ' ~ spellcurve._exp(forth, side)",
            "curve_log",
        ),
        (
            "few events among very many lose their digits",
            "' * (0.33333333333333333e0 + '",
            "' * (0.25e0 + '",
            "curve_of_crowd",
        ),
    ),
    *_in(
        "dialect/types.sql",
        (
            "figures have 32 bits",
            "{% macro duckdb___double_type() %}\n    {{ return('double') }}",
            "{% macro duckdb___double_type() %}\n    {{ return('float') }}",
            "curve",
        ),
    ),
    *_in(
        "numerics/normal_quantile.sql",
        (
            "the normal quantile is good to four digits",
            "{{ return(0 - size if q < 0 else size) }}",
            "{{ return(0 - size | round(4) if q < 0 else size | round(4)) }}",
            "curve",
        ),
    ),
    *_in(
        "numerics/bands.sql",
        (
            "the equal-precision band has the critical value of one duration",
            "({{ spellcurve._equal_precision_series('band_angle', confidence) }}) * sqrt(greenwood_sum)",
            "1.959963984540054e0 * sqrt(greenwood_sum)",
            "curve_band",
        ),
        (
            "the wide band counts events, not spells",
            "sum(events + censored) over ({{ partition }}) as spells_of_band",
            "sum(events) over ({{ partition }}) as spells_of_band",
            "curve_wide_band",
        ),
        (
            "the wide band is as narrow everywhere as at 0",
            "* (1 + spells_of_band * greenwood_sum) / sqrt(spells_of_band) as band_reach",
            "/ sqrt(spells_of_band) as band_reach",
            "curve_wide_band",
        ),
    ),
    # Causes
    *_in(
        "numerics/cause_risk_sets.sql",
        (
            "late entry is forgotten where causes are told apart",
            "sum(leaving - entered) over ({{ from_the_end }}) as net_leaving",
            "sum(leaving) over ({{ from_the_end }}) as net_leaving",
            "incidence",
        ),
        (
            "an event without a cause is lost",
            "set cause_of_event = 'coalesce(' ~ spellcurve._as_text('cause') ~ \", 'unknown')\"",
            "set cause_of_event = spellcurve._as_text('cause')",
            "incidence",
        ),
        (
            "causes that tie are at risk one after the other",
            "order by duration desc range between",
            "order by duration desc, own_cause rows between",
            "incidence",
        ),
        (
            "causes are numbered within each group",
            "dense_rank() over (order by {{ null_first }}) - 1 as own_number",
            "dense_rank() over ({{ partition }}order by {{ null_first }}) - 1 as own_number",
            "incidence",
        ),
        (
            "causes of one label are not merged",
            "{{ cause_of_event }} = {{ spellcurve._text(cause) }} then",
            "{{ cause_of_event }} = {{ spellcurve._text(labels[0][0]) }} then",
            "incidence_of_two",
        ),
    ),
    *_in(
        "estimates/cumulative_incidence.sql",
        (
            "causes do not compete",
            "{{ 'all_events - events' if others == 'competing' else '0' }} as other_events,\n"
            "        {{ 'all_events' if others == 'competing' else 'events' }} as ended",
            "0 as other_events,\n        events as ended",
            "incidence",
        ),
        (
            "others compete although they are to be censored",
            "{{ 'all_events' if others == 'competing' else 'events' }} as ended",
            "all_events as ended",
            "incidence_censored",
        ),
        (
            "a jump is a share of those who survive it",
            "survival_before * own_hazard as own_jump,",
            "survival * own_hazard as own_jump,",
            "incidence",
        ),
        (
            "the variance has lost its covariance term",
            "own_jump * (2 * covariance_before + own_jump * greenwood_before",
            "own_jump * (own_jump * greenwood_before",
            "incidence",
        ),
        (
            "the variance is binomial at each step",
            "own_jump * greenwood_before + survival_before * (1 - own_hazard) * one_of_them)",
            "survival_before * (1 - own_hazard) * one_of_them)",
            "incidence",
        ),
        (
            "another cause is left out of what is still to come",
            "coalesce(sum(other_jump) over ({{ to_come }}), 0) + min(survival) over",
            "min(survival) over",
            "incidence_almost_complete",
        ),
        (
            "an incidence has the bounds of its complement",
            "[('incidence_lower', -1), ('incidence_upper', 1)]",
            "[('incidence_lower', 1), ('incidence_upper', -1)]",
            "incidence",
        ),
        (
            "the horizon hides nothing",
            "where is_step = 1{% if horizon is not none %} and duration <= {{ horizon }}{% endif %}",
            "where is_step = 1",
            "incidence_censored",
        ),
    ),
    *_in(
        "estimates/actuarial_table.sql",
        (
            "the censored count as exposed for the whole band",
            "entering + joined_within / 2 - censored / 2 as exposed",
            "entering + joined_within / 2 as exposed",
            "life_table",
        ),
        (
            "who joins within a band counts from its start",
            "entering + joined_within / 2 - censored / 2 as exposed",
            "entering + joined_within - censored / 2 as exposed",
            "life_table",
        ),
        (
            "a band ends with its upper limit included",
            "when 1 then (duration - mod(duration, {{ width }})) / {{ width }}",
            "when 1 then (greatest(duration - 1, 0) - mod(greatest(duration - 1, 0), {{ width }})) / {{ width }}",
            "life_table",
        ),
        (
            "the life table's variance divides by n times n",
            "then hazard_share / (exposed - events) else 0 end as greenwood_step",
            "then hazard_share / exposed else 0 end as greenwood_step",
            "life_table",
        ),
        (
            "bands in which nothing happens are missing",
            "'coalesce(next_band, band + 1) - band'",
            "'1'",
            "life_table_of_few",
        ),
        (
            "a row has the survival of its band's start",
            "sum(log_step) over ({{ so_far }}) as log_survival",
            "coalesce(sum(log_step) over ({{ so_far | replace('current row', '1 preceding') }}), 0) as log_survival",
            "life_table",
        ),
        (
            "one band too many within the horizon",
            "where (band + units_on) * {{ width }} < {{ horizon }}",
            "where (band + units_on) * {{ width }} <= {{ horizon }}",
            "life_table_of_few",
        ),
    ),
    # Recurrent events
    *_in(
        "estimates/mean_cumulative_count.sql",
        (
            "the variance is naive though robust is asked for",
            "{% if variance == 'poisson' -%}",
            "{% if true -%}",
            "mean_loans",
        ),
        (
            "the events of a subject count as independent",
            "sum(weight * step * (2 * score + step)) as own_squares",
            "sum(weight * step * step) as own_squares",
            "mean_loans",
        ),
        (
            "events are not compared with those expected",
            "(happened * at_risk - r_here * events) / at_risk / at_risk else 0 end as step",
            "happened / at_risk else 0 end as step",
            "mean_loans",
        ),
        (
            "late entry is forgotten where events recur",
            "sum(weight * (leaving - joining)) over (",
            "sum(weight * leaving) over (",
            "mean_loans",
        ),
        (
            "events on the last day of a spell are lost",
            "' or tenure > duration',",
            "' or tenure >= duration',",
            "mean_loans",
        ),
        (
            "events between two spells count to the earlier",
            "(' or event_moment > last_seen' if by_moment else '') ~ ' or tenure > duration'",
            "''",
            "mean_loans",
        ),
        (
            "events before observation are counted",
            "'before_observation', 'tenure <= entry and entry > 0'",
            "'before_observation', 'tenure < entry and entry > 0'",
            "mean_loans mean_loans_refused",
        ),
        (
            "tenure is guessed where a subject has several spells",
            "'several_spells', 'spell_key > 1'",
            "'several_spells', 'spell_key > 2'",
            "mean_loans_by_age_refused",
        ),
        (
            "only one event a day is counted",
            "sum(happened) as happened",
            "max(happened) as happened",
            "mean_loans",
        ),
        (
            "spells without a subject are one subject",
            "case when subject_id is null then spell_key else 0 end as unit_number",
            "0 as unit_number",
            "mean_loans",
        ),
        (
            "weights do not count at risk",
            "sum(weight * happened) over ({{ at_duration | trim }}) as events",
            "sum(happened) over ({{ at_duration | trim }}) as events",
            "mean_loans",
        ),
        (
            "the log interval of a mean count is linear",
            "mean_count * {{ spellcurve._exp(forth ~ ' * root_of_variance / mean_count') }}",
            "(mean_count + {{ forth }} * root_of_variance)",
            "mean_loans",
        ),
    ),
    # States
    *_in(
        "estimates/state_shares.sql",
        (
            "late entry is forgotten where states are followed",
            "sum(leaving_{{ s }} - joining_{{ s }}) over (",
            "sum(leaving_{{ s }}) over (",
            "states",
        ),
        (
            "states are followed from before observation",
            "greatest(tenure, entry) as begins",
            "tenure as begins",
            "states_from_joining",
        ),
        (
            "of several changes on one day the first counts",
            "set last_first = 'moment desc' ~ (', sequence_value desc' if sequence else '')",
            "set last_first = 'moment' ~ (', sequence_value' if sequence else '')",
            "states",
        ),
        (
            "moves are a share of all at risk, not of their state",
            "then moves_{{ s }}_{{ t }} / at_risk_{{ s }} else 0 end",
            "then moves_{{ s }}_{{ t }} / (at_risk_{{ s }} + 1) else 0 end",
            "states",
        ),
        (
            "matrices are multiplied in the wrong order",
            "'earlier_p_' ~ s ~ '_' ~ u ~ ' * p_' ~ u ~ '_' ~ t",
            "'p_' ~ s ~ '_' ~ u ~ ' * earlier_p_' ~ u ~ '_' ~ t",
            "states",
        ),
        (
            "a subject stands in the group that it was in last",
            "partition by subject_id order by {{ in_order }} rows between unbounded preceding and current row\n        ) as {{ group }}",
            "partition by subject_id order by {{ in_order }} rows between current row and current row\n        ) as {{ group }}",
            "states",
        ),
        (
            "tenure is counted from the first status, not from the origin",
            "min(origin) over (partition by subject_id) as origin",
            "min(moment) over (partition by subject_id) as origin",
            "states_from_joining",
        ),
        (
            "rows before the origin are kept",
            "['before_origin', spellcurve._is_before('moment', 'origin', o)",
            "['before_origin', 'false'",
            "states_refused",
        ),
        (
            "the product of matrices stops after a few durations",
            "{%- set doubling.reach = doubling.reach * 2 -%}",
            "{%- set doubling.reach = doubling.reach * 4 -%}",
            "states",
        ),
    ),
    # Read-outs
    *_in(
        "readouts/_curve_rows.sql",
        (
            "a duration has the row after it",
            "'(duration <= ' ~ at ~ ' or previous_duration is null) and (next_duration > ' ~ at",
            "'(duration < ' ~ at ~ ' or previous_duration is null) and (next_duration >= ' ~ at",
            "shares",
        ),
        (
            "the last row stands for what lies beyond follow-up",
            "\" and next_duration is null then 'beyond_follow_up'\"",
            "\" and next_duration is null then 'observed'\"",
            "shares",
        ),
        (
            "a curve that has ended is not known any more",
            "\"when survival = 0 then 'observed'\"",
            "\"when survival < 0 then 'observed'\"",
            "shares",
        ),
        (
            "at risk is that of the step before",
            "' then at_risk when next_duration is not null then next_at_risk'",
            "' then at_risk when next_duration is not null then at_risk'",
            "shares",
        ),
        (
            "a gap for too few at risk is read across",
            "\" and next_survival is null then 'too_few_at_risk'\"",
            "\" and next_survival is null then 'observed'\"",
            "shares_of_many",
        ),
        (
            "neighbours are looked for in all groups",
            "lead(duration) over ({{ partition }}order by duration) as next_duration",
            "lead(duration) over (order by duration) as next_duration",
            "shares",
        ),
    ),
    *_in(
        "readouts/survival_at.sql",
        (
            "the bounds of the share of events are not turned",
            "case when status = 'observed' then 1 - survival_upper end as event_share_lower,\n"
            "    case when status = 'observed' then 1 - survival_lower end as event_share_upper",
            "case when status = 'observed' then 1 - survival_lower end as event_share_lower,\n"
            "    case when status = 'observed' then 1 - survival_upper end as event_share_upper",
            "shares",
        ),
        (
            "figures stand beside any status",
            "case when status = 'observed' then survival end as survival",
            "survival",
            "shares",
        ),
    ),
    *_in(
        "readouts/survival_quantiles.sql",
        (
            "a level that is met exactly is missed",
            "spellcurve._level_of_share(share) * (1 + 1e-9)",
            "spellcurve._level_of_share(share) * (1 - 1e-9)",
            "medians_met",
        ),
        (
            "levels have no tolerance",
            "spellcurve._level_of_share(share) * (1 + 1e-9)",
            "spellcurve._level_of_share(share)",
            "medians_met",
        ),
        (
            "the median is one unit late",
            "at_survival as duration,",
            "at_survival + 1 as duration,",
            "medians",
        ),
        (
            "bounds of quantiles are swapped",
            "at_survival_lower as duration_lower,\n    at_survival_upper as duration_upper",
            "at_survival_upper as duration_lower,\n    at_survival_lower as duration_upper",
            "medians",
        ),
        (
            "a share of events is taken for one of survivors",
            "{{ return(1 - share) }}",
            "{{ return(share) }}",
            "medians",
        ),
    ),
    *_in(
        "readouts/restricted_mean.sql",
        (
            "the area ends a unit after the horizon",
            "least(coalesce(next_duration, horizon), horizon) - greatest",
            "least(coalesce(next_duration, horizon), horizon + 1) - greatest",
            "means",
        ),
        (
            "the area is that to the right of each step",
            "sum(survival * width) as area,",
            "sum(survival * (width - 1)) as area,",
            "means",
        ),
        (
            "the variance lacks the square of the area",
            "sum(area_after * area_after * greenwood_step) as variance",
            "sum(area_after * greenwood_step) as variance",
            "means",
        ),
        (
            "the mean of survivors is not divided by their share",
            "case when status = 'observed' then area / survival_so_far end as restricted_mean",
            "case when status = 'observed' then area end as restricted_mean",
            "means_from_two",
        ),
        (
            "a horizon beyond follow-up is answered",
            "when last_duration < horizon and ended_at is null then 'beyond_follow_up'",
            "when last_duration < horizon and ended_at is null then 'observed'",
            "means",
        ),
    ),
    *_in(
        "readouts/survival_beyond.sql",
        (
            "conditional survival is divided by the survival of the row itself",
            "survival / nullif(base_survival, 0) as share",
            "survival as share",
            "beyond",
        ),
        (
            "the variance is that of all who began",
            "case when duration > survived then {{ spellcurve._greenwood_step() }} else 0 end as greenwood_step",
            "{{ spellcurve._greenwood_step() }} as greenwood_step",
            "beyond",
        ),
        (
            "expected time takes in the row's own stretch",
            "sum(share * (next_duration - duration)) over ({{ before }})",
            "sum(share * (next_duration - duration)) over ({{ so_far }})",
            "beyond",
        ),
        (
            "tenure already passed is not taken as the first row",
            "greatest(duration, survived) as duration",
            "duration as duration",
            "beyond",
        ),
    ),
    *_in(
        "readouts/cohort_readout.sql",
        (
            "cohorts are not cut to their period",
            "spellcurve._date(dbt.date_trunc(period, spellcurve._date(column)))",
            "spellcurve._date(column)",
            "cohorts",
        ),
        (
            "the naive share leaves out who is censored",
            "{{ spellcurve._double('events_so_far') }} / nullif({{ spellcurve._double('spells') }}, 0)",
            "{{ spellcurve._double('events_so_far') }} / nullif({{ spellcurve._double('spells - censored_before') }}, 0)",
            "cohorts",
        ),
        (
            "who is censored at a duration is censored before it",
            "censored_so_far - case when duration = wanted then censored else 0 end as censored_before",
            "censored_so_far as censored_before",
            "cohorts",
        ),
        (
            "cohorts are not told apart by group",
            "sum(events + censored) over ({{ partition | trim }}) as spells",
            "sum(events + censored) over (partition by group_1) as spells",
            "cohorts",
        ),
    ),
    *_in(
        "readouts/hazard_by_band.sql",
        (
            "time at risk is counted in spells",
            "at_risk * (\n            least(duration,",
            "(\n            least(duration,",
            "bands",
        ),
        (
            "an event at the limit counts to the band after",
            "'floor(' ~ spellcurve._double('greatest(duration - 1, 0)') ~ ' / ' ~ width ~ ')'",
            "'floor(' ~ spellcurve._double('duration') ~ ' / ' ~ width ~ ')'",
            "bands",
        ),
        (
            "the last band reaches beyond the horizon",
            "'least(' ~ to_duration ~ ', ' ~ horizon ~ ')' if horizon is not none else to_duration",
            "to_duration",
            "bands_to_ten",
        ),
        (
            "limits are not divided by time",
            "{{ spellcurve._poisson_limit('whole_events', confidence, 1) }} / divisor as hazard_upper",
            "{{ spellcurve._poisson_limit('whole_events', confidence, 1) }} as hazard_upper",
            "bands",
        ),
    ),
    *_in(
        "numerics/poisson_interval.sql",
        (
            "the upper limit of a count has the lower one's shape",
            "{%- set extra = 1 if side > 0 else 0 -%}",
            "{%- set extra = 0 -%}",
            "bands",
        ),
        (
            "limits of a count leave the whole rest on one side",
            "{%- set tail = (1 - confidence) / 2 -%}",
            "{%- set tail = 1 - confidence -%}",
            "bands",
        ),
    ),
    *_in(
        "readouts/incidence_at.sql",
        (
            "an incidence is carried forward beyond follow-up",
            "when wanted > last_duration and coalesce(total_at_end, 0) < 1 - 1e-9 then 'beyond_follow_up'",
            "when wanted < 0 then 'beyond_follow_up'",
            "incidence_shares",
        ),
        (
            "an incidence is read one step late",
            "(duration <= wanted or previous_duration is null) and (next_duration > wanted or next_duration is null)",
            "(duration < wanted or previous_duration is null) and (next_duration >= wanted or next_duration is null)",
            "incidence_shares",
        ),
    ),
    *_in(
        "readouts/incidence_hazards.sql",
        (
            "hazards of causes are added up over all causes",
            "spellcurve._partition_by(groups + ['cause'])\n        ~ 'order by duration rows",
            "spellcurve._partition_by(groups)\n        ~ 'order by duration rows",
            "incidence_rates",
        ),
        (
            "the variance of a cause's hazard is the hazard",
            "sqrt(cumulative_variance)",
            "sqrt(cumulative_hazard)",
            "incidence_rates",
        ),
    ),
    *_in(
        "readouts/incidence_stacked.sql",
        (
            "a part begins where it ends",
            "when side = 1 then greatest(0, sum_so_far - incidence) else",
            "when side = 1 then sum_so_far else",
            "incidence_parts",
        ),
        (
            "those still going are shown once for each cause",
            "where side = 1 or place = 1",
            "where side in (1, 2)",
            "incidence_parts",
        ),
    ),
    # Tests of groups
    *_in(
        "comparisons/_at_events.sql",
        (
            "strata are ignored",
            "dense_rank() over ({{ segment }}order by {{ compared.strata_aliases | join(', ') }}) as stratum",
            "1 as stratum",
            "logrank_stratified",
        ),
        (
            "groups without a row of their own are at risk no more",
            "{{ each }}stratum, duration, group_number, group_count, reference_number, group_label, at_risk, events, all_events,\n        sum(at_risk)",
            "{{ each }}stratum, duration, group_number, group_count, reference_number, group_label, case when events > 0 then at_risk else 0 end as at_risk, events, all_events,\n        sum(at_risk)",
            "logrank",
        ),
        (
            "Gehan's weights are those of the log-rank test",
            "'gehan': at_risk",
            "'gehan': '1e0'",
            "logrank_gehan",
        ),
        (
            "Tarone and Ware's weights lack the root",
            "'tarone-ware': 'sqrt(' ~ at_risk ~ ')'",
            "'tarone-ware': at_risk",
            "logrank_tarone_ware",
        ),
        (
            "Peto's weights are the Kaplan-Meier survival before",
            "{%- set upto = course ~ ('current row' if peto else '1 preceding') -%}",
            "{%- set upto = course ~ '1 preceding' -%}",
            "logrank_peto",
        ),
        (
            "Peto's weights lack the one that is added",
            "'(' ~ at_risk ~ ' + 1)' if peto else at_risk",
            "'(' ~ at_risk ~ ' + 0)' if peto else at_risk",
            "logrank_peto",
        ),
        (
            "the modified weights are not modified",
            "* {{ at_risk }} / ({{ at_risk }} + 1) as {{ prefix }}_weight",
            "as {{ prefix }}_weight",
            "logrank_modified_peto",
        ),
        (
            "Fleming and Harrington's weights take in the step itself",
            "{%- set upto = course ~ ('current row' if peto else '1 preceding') -%}",
            "{%- set upto = course ~ 'current row' -%}",
            "logrank_early",
        ),
        (
            "p and q are exchanged",
            "{%- set p, q = found.group(1) | float, found.group(2) | float -%}",
            "{%- set q, p = found.group(1) | float, found.group(2) | float -%}",
            "logrank_late",
        ),
        (
            "ties are not corrected for",
            "'case when ' ~ events ~ ' <= 1 then 1 when '",
            "'case when ' ~ events ~ ' <= 1e9 then 1 when '",
            "logrank",
        ),
        (
            "ties are corrected with n",
            "~ ') / (' ~ at_risk ~ ' - 1) end'",
            "~ ') / (' ~ at_risk ~ ') end'",
            "logrank",
        ),
    ),
    *_in(
        "comparisons/log_rank_test.sql",
        (
            "expected events are those of all groups",
            "case when pair_events > 0 then pair_events * (first_at_risk / pair_at_risk) else 0 end as first_expected",
            "case when pair_events > 0 then all_events * (first_at_risk / all_at_risk) else 0 end as first_expected",
            "logrank",
        ),
        (
            "the hazard ratio is turned round",
            "{{ '' if turned is none else 'case when ' ~ turned ~ ' then -1 else 1 end * ' }}excess / variance",
            "0 - {{ '' if turned is none else 'case when ' ~ turned ~ ' then -1 else 1 end * ' }}excess / variance",
            "logrank",
        ),
        (
            "the hazard ratio is not turned to the reference",
            "'case when ' ~ turned ~ ' then -1 else 1 end * '",
            "''",
            "logrank_stratified",
        ),
        (
            "limits of the ratio are on its own scale",
            "spellcurve._exp('log_hazard_ratio' ~ (margin ~ z ~ ' / sqrt(information)' if margin else ''))",
            "spellcurve._exp('log_hazard_ratio') ~ (margin ~ z ~ ' / sqrt(information)' if margin else '')",
            "logrank",
        ),
        (
            "weights count once in the variance",
            "sum(pair_weight * pair_weight * variance) as weighted_variance",
            "sum(pair_weight * variance) as weighted_variance",
            "logrank_gehan",
        ),
        (
            "there are as many degrees of freedom as groups",
            "rank_so_far as degrees_of_freedom",
            "group_count as degrees_of_freedom",
            "logrank_tarone_ware",
        ),
    ),
    *_in(
        "comparisons/_pairs.sql",
        (
            "Holm's p-values are not monotone",
            "then least(1, max(({{ p_value }}_count + 1 - {{ p_value }}_rank) * {{ p_value }}) over (",
            "then least(1, min(({{ p_value }}_count + 1 - {{ p_value }}_rank) * {{ p_value }}) over (",
            "logrank",
        ),
        (
            "Holm's first factor is one too small",
            "({{ p_value }}_count + 1 - {{ p_value }}_rank) * {{ p_value }}",
            "({{ p_value }}_count - {{ p_value }}_rank) * {{ p_value }}",
            "logrank",
        ),
        (
            "Bonferroni counts each pair twice",
            "then least(1, {{ p_value }} * count({{ p_value }}) over",
            "then least(1, {{ p_value }} * 2 * count({{ p_value }}) over",
            "logrank_stratified",
        ),
        (
            "Benjamini and Hochberg's minimum runs from the smallest",
            "order by {{ p_value }}_rank desc rows between",
            "order by {{ p_value }}_rank rows between",
            "logrank_gehan",
        ),
    ),
    *_in(
        "numerics/sweep.sql",
        (
            "the covariance is added up with the wrong sign",
            "        figure + coalesce(",
            "        figure - coalesce(",
            "logrank",
        ),
    ),
    *_in(
        "numerics/tails.sql",
        (
            "a tail has one degree of freedom whatever the test has",
            "{%- if freedom == 1 %}\n            {{ spellcurve._scaled_erfc(prefix ~ '_root') }}",
            "{%- if true %}\n            {{ spellcurve._scaled_erfc(prefix ~ '_root') }}",
            "logrank",
        ),
        (
            "p-values are one-sided",
            "'_half * ' ~ prefix ~ '_decay) end'",
            "'_half * ' ~ prefix ~ '_decay / 2) end'",
            "logrank",
        ),
    ),
    *_in(
        "comparisons/incidence_log_rank_test.sql",
        (
            "the test of one cause counts every event",
            "case when event = 1 and {{ spellcurve._is_of_causes(causes) }} then 1 else 0 end as event",
            "event",
            "logrank_of_cause",
        ),
    ),
    *_in(
        "comparisons/incidence_gray_test.sql",
        (
            "Gray's risk sets are those of the log-rank test",
            "reach * (1 - incidence_before) as gray_at_risk,",
            "at_risk as gray_at_risk,",
            "gray",
        ),
        (
            "Gray's variance leaves other causes out",
            "sum(first_own_term * second_own_term * own_factor + first_other_term * second_other_term * other_factor) as covariance",
            "sum(first_own_term * second_own_term * own_factor) as covariance",
            "gray",
        ),
        (
            "Gray's variance does not correct for ties",
            "then 1 - (all_events - 1) / (all_reach * survival_before - 1)",
            "then 1",
            "gray",
        ),
    ),
    *_in(
        "comparisons/_differences.sql",
        (
            "standard errors are added",
            "sqrt(std_error * std_error + reference_std_error * reference_std_error)",
            "std_error + reference_std_error",
            "share_differences mean_differences",
        ),
        (
            "limits of a ratio are on its own scale",
            "ratio * ' ~ spellcurve._exp(sign ~ z ~ ' * relative_error') ~ ' end'",
            "ratio * (1 + ' ~ sign ~ z ~ ' * relative_error) end'",
            "share_differences",
        ),
        (
            "the ratio is that of the reference to the group",
            "case when {{ figure_b }} > 0 then {{ figure_a }} / {{ figure_b }} end as ratio",
            "case when {{ figure_a }} > 0 then {{ figure_b }} / {{ figure_a }} end as ratio",
            "mean_differences",
        ),
    ),
    *_in(
        "comparisons/difference_at.sql",
        (
            "the difference of log-log survivals has a wrong delta-method term",
            "relative ~ ' / (0 - ln(survival))'",
            "relative ~ ' * (0 - ln(survival))'",
            "share_differences_log_log",
        ),
        (
            "the difference of logits has a wrong delta-method term",
            "relative ~ ' / (1 - survival)'",
            "relative ~ ' / survival'",
            "share_differences_logit",
        ),
    ),
    *_in(
        "comparisons/difference_in_restricted_mean.sql",
        (
            "means are compared to a horizon one unit off",
            "horizon as wanted,",
            "horizon - 1 as wanted,",
            "mean_differences",
        ),
        (
            "the reference group is compared with itself",
            "case when {{ spellcurve._is_reference(group, reference) }} then 1 else 0 end as is_reference",
            "case when {{ group }} is null then 1 else 0 end as is_reference",
            "mean_differences",
        ),
    ),
    *_in(
        "comparisons/difference_in_mean_count.sql",
        (
            "a mean count is compared beyond follow-up",
            "case when duration <= wanted and (next_duration is not null or duration = wanted) then 1 else 0 end as is_followed",
            "1 as is_followed",
            "loan_differences",
        ),
        (
            "the ratio of mean counts has the standard error of their difference",
            "std_error / mean_count * (std_error / mean_count)\n",
            "std_error * std_error\n",
            "loan_differences",
        ),
    ),
    *_in(
        "comparisons/trend_test.sql",
        (
            "scores are numbers in order whatever they are",
            "{{ return(spellcurve._read_number(label)) }}",
            "{{ return('least(3, ' ~ spellcurve._read_number(label) ~ ')') }}",
            "trend",
        ),
        (
            "the mean score is not weighted by those at risk",
            "sum(case when all_at_risk > 0 then score * (at_risk / all_at_risk) end) over",
            "avg(case when all_at_risk > 0 then score end) over",
            "trend",
        ),
        (
            "the sign of a trend is turned",
            "when z > 0 then 'sooner'\n        when z < 0 then 'later'",
            "when z > 0 then 'later'\n        when z < 0 then 'sooner'",
            "trend",
        ),
    ),
    *_in(
        "comparisons/events_needed.sql",
        (
            "events needed are half of what two groups need",
            "reach * reach / (allocation * (1 - allocation) * log_ratio * log_ratio)",
            "reach * reach / (allocation * log_ratio * log_ratio)",
            "events_wanted",
        ),
        (
            "one side is taken for two",
            "spellcurve._normal_quantile(alpha / sides)",
            "spellcurve._normal_quantile(alpha / 2)",
            "events_wanted_one_sided",
        ),
        (
            "events needed are rounded down",
            "{{ return(below if number == below else below + 1) }}",
            "{{ return(below) }}",
            "events_wanted wait",
        ),
    ),
    *_in(
        "comparisons/time_to_events_needed.sql",
        (
            "late entries count as begun",
            "sum(case when entry = 0 then {{ weight }} else 0 end) as begun",
            "sum({{ weight }}) as begun",
            "wait",
        ),
        (
            "time at risk is counted from the start of a spell",
            "sum({{ weight }} * (duration - entry)) as time_at_risk",
            "sum({{ weight }} * duration) as time_at_risk",
            "wait",
        ),
        (
            "no events are expected once intake has ended",
            "(gone + (1 - gone) * hazard_waiting * (1 - gone_waiting))",
            "gone",
            "wait_with_pause",
        ),
    ),
    # Spell tables
    *_in(
        "spells/_observation.sql",
        (
            "weeks are rounded",
            "'floor(' ~ spellcurve._days_between(earlier, later) ~ ' / 7.0)'",
            "'floor(' ~ spellcurve._days_between(earlier, later) ~ ' / 7.0 + 0.5)'",
            "intervals_apart",
        ),
        (
            "months count the boundaries crossed",
            " - case when extract(day from ' ~ later",
            " - 0 * case when extract(day from ' ~ later",
            "intervals_by_month",
        ),
        (
            "a gap as long as the grace is not bridged",
            "{%- set sign = ' <= ' if inclusive else ' < ' -%}",
            "{%- set sign = ' < ' -%}",
            "log",
        ),
        (
            "a silence as long as the limit is bridged",
            "{%- set sign = ' <= ' if inclusive else ' < ' -%}",
            "{%- set sign = ' <= ' -%}",
            "active_to_last",
        ),
        (
            "when a row was recorded is ignored",
            "{%- if observation.recorded_at is none -%}\n        {{ return([]) }}",
            "{%- if true -%}\n        {{ return([]) }}",
            "intervals",
        ),
        (
            "the last fault is named instead of the first",
            "    {%- for code, condition, detail in rules %}\n    when {{ condition }} then '{{ code }}'",
            "    {%- for code, condition, detail in rules | reverse %}\n    when {{ condition }} then '{{ code }}'",
            "intervals_refused",
        ),
        (
            "refused rows take part in what follows",
            "{{ return('where fault is null' if observation.rows == 'sound' else '') }}",
            "{{ return('') }}",
            "log",
        ),
        (
            "days are compared by the clock",
            "{{ return('cast(' ~ earlier ~ ' as date) < cast(' ~ later ~ ' as date)') }}",
            "{{ return(earlier ~ ' < ' ~ later) }}",
            "intervals intervals_refused",
        ),
    ),
    *_in(
        "spells/_spells_from_pieces.sql",
        (
            "who is censored is followed to as_of whatever the grace",
            "then spell_ended else {{ cut }} end as last_seen",
            "then spell_ended else {{ o.as_of_sql }} end as last_seen",
            "log",
        ),
        (
            "an end at as_of is not known yet",
            "case when spell_ended <= {{ cut }} then 1 else 0 end as event",
            "case when spell_ended < {{ cut }} then 1 else 0 end as event",
            "intervals",
        ),
        (
            "knowledge of ends reaches to as_of whatever the grace",
            "known_to if wait == 0 else spellcurve._moment_plus(known_to, 0 - wait, o.clock)",
            "known_to",
            "log",
        ),
        (
            "the wait before an end is final is one day short",
            "spellcurve._moment_plus(known_to, 0 - wait, o.clock)",
            "spellcurve._moment_plus(known_to, 1 - wait, o.clock)",
            "log",
        ),
        (
            "overlapping rows are compared with the row before only",
            "max(ended) over (\n            partition by subject_id{{ apart }} order by place_in_order rows between unbounded preceding and 1 preceding",
            "max(ended) over (\n            partition by subject_id{{ apart }} order by place_in_order rows between 1 preceding and 1 preceding",
            "intervals",
        ),
        (
            "a spell has the cause of any of its rows",
            "min(case when ended = spell_ended then cause end) over (",
            "min(cause) over (",
            "intervals",
        ),
        (
            "a spell's cause is lost",
            "case when event = 1 then known_cause end as cause",
            "case when event = 1 then 'event' end as cause",
            "intervals",
        ),
        (
            "open spells have a cause",
            "case when event = 1 then known_cause end as cause",
            "known_cause as cause",
            "intervals",
        ),
        (
            "observation that began late counts as entry at 0",
            "when spell_started < {{ observe_from }} then {{ spellcurve._completed_units('spell_started', observe_from, o.unit) }}",
            "when spell_started < {{ observe_from }} then {{ spellcurve._integer('0') }}",
            "intervals",
        ),
        (
            "entry is one unit late",
            "{{ spellcurve._completed_units('spell_started', observe_from, o.unit) }}",
            "{{ spellcurve._completed_units('spell_started', observe_from, o.unit) }} + 1",
            "intervals",
        ),
        (
            "spells that ended before observation are kept",
            "spellcurve._is_before('last_seen', observe_from, o)",
            "'false'",
            "intervals",
        ),
        (
            "the last day counts as a whole one",
            "{{ spellcurve._completed_units('spell_started', 'last_seen', o.unit) }} as duration",
            "{{ spellcurve._completed_units('spell_started', 'last_seen', o.unit) }} + 1 as duration",
            "intervals",
        ),
        (
            "spells are numbered from the last",
            "order by spell_started, last_seen, event, known_cause)",
            "order by spell_started desc, last_seen, event, known_cause)",
            "intervals",
        ),
        (
            "a spell stands once for each of its rows",
            "where is_first = 1 and fault is null",
            "where fault is null",
            "intervals",
        ),
        (
            "the rows that make a spell are not counted",
            "count(*) over (partition by subject_id{{ apart }}, spell_key) as source_rows\n    from pieces_by_spell",
            "1 as source_rows\n    from pieces_by_spell",
            "intervals",
        ),
    ),
    *_in(
        "spells/spells_from_intervals.sql",
        (
            "rows that end before they start are kept",
            "'ends_before_start', spellcurve._is_before('ended', 'started', o)",
            "'ends_before_start', 'false'",
            "intervals",
        ),
        (
            "an end that cannot be read counts as none",
            "'unreadable_end', 'raw_end is not null and ended is null'",
            "'unreadable_end', 'false'",
            "intervals",
        ),
        (
            "rows that start at as_of do not exist yet",
            "'starts_after_as_of', 'started > ' ~ o.as_of_sql",
            "'starts_after_as_of', 'started >= ' ~ o.as_of_sql",
            "intervals",
        ),
        (
            "duplicates are kept",
            "['duplicate_row', 'copy_number > 1'",
            "['duplicate_row', 'copy_number > 9'",
            "intervals_apart_refused",
        ),
        (
            "overlapping rows are kept though they are to be refused",
            "'overlaps_earlier', spellcurve._is_before('started', 'reached', o)",
            "'overlaps_earlier', 'false'",
            "intervals_apart",
        ),
    ),
    *_in(
        "spells/spells_from_durations.sql",
        (
            "weights of the source are lost",
            "{{ 'weight_read' if weight else spellcurve._integer('1') }} as weight",
            "{{ spellcurve._integer('1') }} as weight",
            "timed",
        ),
        (
            "entry at the end of the spell is refused",
            "['entry_after_duration', 'entry_read > duration_read'",
            "['entry_after_duration', 'entry_read >= duration_read'",
            "timed",
        ),
        (
            "true is no event",
            "in ('1', '1.0', 'true', 't') then 1",
            "in ('1', '1.0') then 1",
            "timed",
        ),
        (
            "durations that are not whole are cut",
            "'duration_not_whole', 'floor(duration_read) <> duration_read'",
            "'duration_not_whole', 'false'",
            "timed",
        ),
        (
            "refused durations are lost",
            "from rows_judged\nwhere fault is not null",
            "from rows_judged\nwhere fault is not null and subject_id is not null",
            "timed_refused",
        ),
    ),
    *_in(
        "spells/spells_from_event_log.sql",
        (
            "a second opening begins a spell of its own",
            "'already_open', 'is_open = 1 and stands_open = 1'",
            "'already_open', 'false'",
            "log_refused",
        ),
        (
            "at one moment rows are taken in the order of their kind",
            "case when is_mixed = 1 and was_open = 0 then 1 - is_open else is_open end, kind",
            "kind",
            "log",
        ),
        (
            "a closing without an opening is lost, in neither table",
            "['nothing_open', 'is_open = 0 and stands_open = 0'",
            "['nothing_open', 'is_open = 0 and stands_open = 7'",
            "log_refused",
        ),
        (
            "the sequence of rows is ignored",
            "{%- set in_order = 'moment, ' ~ ('case when sequence_value is null then 1 else 0 end, sequence_value, ' if sequence else '') -%}",
            "{%- set in_order = 'moment, ' -%}",
            "log_in_sequence",
        ),
        (
            "kinds are not turned into causes",
            "kind = {{ spellcurve._text(value) }} then {{ spellcurve._text(label) }}",
            "kind = {{ spellcurve._text(value) }} then kind",
            "log",
        ),
    ),
    *_in(
        "spells/spells_from_status_history.sql",
        (
            "a status lasts until the last row",
            "lead(moment) over (partition by subject_id{{ apart }} order by place_in_order) as following_moment",
            "max(moment) over (partition by subject_id{{ apart }}) as following_moment",
            "statuses_changed",
        ),
        (
            "ends of their own are ignored",
            "case when is_active = 1 then coalesce(own_end, next_moment) else last_active end as ended",
            "case when is_active = 1 then next_moment else last_active end as ended",
            "statuses_with_ends",
        ),
        (
            "statuses that contradict each other are kept",
            "'conflicting_status', 'least_active <> most_active'",
            "'conflicting_status', 'false'",
            "statuses_changed statuses_refused",
        ),
        (
            "a day without a snapshot of anybody ends every spell",
            "lead(snapshot_day) over (order by snapshot_day) as next_day",
            "snapshot_day + interval '1 day' as next_day",
            "statuses_by_day",
        ),
        (
            "snapshots are known to as_of",
            "last_known='last_day' if by_snapshot else none",
            "last_known=none",
            "statuses_by_day",
        ),
        (
            "the cause is that of the active row",
            "case when is_active = 1 and next_is_active = 0 then next_cause end as cause",
            "case when is_active = 1 then cause_of_moment end as cause",
            "statuses_changed",
        ),
    ),
    *_in(
        "spells/spells_from_activity.sql",
        (
            "silence is one day short",
            "spellcurve._moment_plus(counted_from, lapse_after, o.clock)",
            "spellcurve._moment_plus(counted_from, lapse_after - 1, o.clock)",
            "active",
        ),
        (
            "silence is counted from the clock, not from the day",
            "if o.by_day else 'moment' -%}",
            "if false else 'moment' -%}",
            "active",
        ),
        (
            "activity after as_of is seen already",
            "['after_as_of', 'moment > ' ~ o.as_of_sql",
            "['after_as_of', 'false'",
            "active_refused",
        ),
    ),
    *_in(
        "spells/spells_to_first_event.sql",
        (
            "the last event counts, not the first",
            "max(case when is_origin = 0 then moment end) over (partition by subject_id{{ apart }}, events_to_come) as next_event",
            "max(case when is_origin = 0 then moment end) over (partition by subject_id{{ apart }}, spell_key) as next_event",
            "first_loan",
        ),
        (
            "an event at the origin counts to the origin before",
            "order by moment, is_origin desc rows between unbounded preceding and current row\n        ) as spell_key",
            "order by moment, is_origin rows between unbounded preceding and current row\n        ) as spell_key",
            "first_loan",
        ),
        (
            "events before the origin are counted in silence",
            "['no_origin', 'spell_key = 0'",
            "['no_origin', 'spell_key < 0'",
            "first_loan_refused",
        ),
        (
            "the same origin counts twice",
            "['duplicate_row', 'copy_number > 1'",
            "['duplicate_row', 'copy_number > 9'",
            "first_loan",
        ),
    ),
]

NEW_SPELL = (
    "insert into stays select * replace ('new' as subject_id, 1 as duration, 1 as event, 'moved' as cause)"
    " from stays where subject_id = 'm0'"
)
ONE_ROW = "plan = 'household' and duration = 3"
TAMPERINGS = [
    Tampering("a row is deleted", ("curve",), (f"delete from curve where {ONE_ROW}",)),
    Tampering("a row stands twice", ("curve",), (f"insert into curve select * from curve where {ONE_ROW}",)),
    Tampering(
        "a row is added",
        ("curve",),
        (f"insert into curve select * replace (99 as duration) from curve where {ONE_ROW}",),
    ),
    Tampering("a group is missing", ("curve",), ("delete from curve where plan is null",)),
    Tampering("a column is renamed", ("curve",), ("alter table curve rename survival to surviving",)),
    Tampering("a figure is nulled", ("curve",), (f"update curve set survival_lower = null where {ONE_ROW}",)),
    Tampering(
        "a figure is wrong in its ninth digit",
        ("curve",),
        (f"update curve set survival = survival * (1 + 1e-8) where {ONE_ROW}",),
    ),
    Tampering(
        "figures are rounded to two digits", ("curve",), ("update curve set survival = round(survival, 2)",)
    ),
    Tampering(
        "a count is one too high", ("curve",), (f"update curve set at_risk = at_risk + 1 where {ONE_ROW}",)
    ),
    Tampering(
        "a status is changed",
        ("shares",),
        ("update shares set status = 'beyond_follow_up' where plan = 'household' and duration = 3",),
    ),
    Tampering("a median is made up", ("medians",), ("update medians set duration = 9 where plan = 'trial'",)),
    Tampering("a p-value is changed", ("logrank",), ("update logrank set p_value = p_value / 2",)),
    Tampering(
        "a hazard ratio is turned", ("logrank",), ("update logrank set hazard_ratio = 1 / hazard_ratio",)
    ),
    Tampering(
        "an incidence has another cause",
        ("incidence",),
        (
            "update incidence set cause = case cause when 'moved' then 'lapsed' when 'lapsed' then 'moved' end",
        ),
    ),
    Tampering("a state is missing", ("states",), ("delete from states where state = 'paused'",)),
    Tampering("a spell is deleted", ("intervals",), ("delete from intervals where subject_id = 'cat'",)),
    Tampering(
        "a spell has got an event",
        ("intervals",),
        ("update intervals set event = 1 where subject_id = 'gus'",),
    ),
    Tampering(
        "a refused row is lost",
        ("intervals_refused",),
        ("delete from intervals_refused where subject_id = 'kim'",),
    ),
    Tampering(
        "a row is refused for another fault",
        ("log_refused",),
        ("update log_refused set fault = 'no_subject' where fault = 'already_open'",),
    ),
    Tampering(
        "spells were added after the curves were built",
        ("curve", "incidence", "bands", "life_table"),
        (NEW_SPELL,),
        ("delete from stays where subject_id = 'new'",),
    ),
    Tampering(
        "spells were taken out after the tests were made",
        ("logrank", "trend"),
        ("create table kept_stays as select * from stays", "delete from stays where subject_id = 'm4'"),
        ("drop table stays", "alter table kept_stays rename to stays"),
    ),
    Tampering(
        "spells were built with an earlier as_of",
        ("members_now",),
        built_with={"as_of": "2024-02-29"},
        said="Its unfinished spells were last seen at 2024-02-29 00:00:00, those of a build now would be at 2024-03-31",
    ),
    Tampering(
        "spells were built with another period of observation",
        ("members_now",),
        built_with={"observe_from": "2024-02-10"},
    ),
]
