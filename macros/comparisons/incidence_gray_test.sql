{% macro incidence_gray_test(spells, between, causes, by=[], most_groups=10) %}
    {%- do spellcurve._check_call(
        'incidence_gray_test',
        {'spells': spells, 'between': between, 'causes': causes},
        ['spells', 'between', 'causes', 'by', 'most_groups'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('incidence_gray_test', 'spellcurve')(spells, between, causes, by, most_groups)) }}
{% endmacro %}


{% macro default__incidence_gray_test(spells, between, causes, by, most_groups) %}
    {%- set caller_name = 'incidence_gray_test' -%}
    {%- set taken = ['statistic', 'degrees_of_freedom', 'p_value', 'status'] -%}
    {%- set compared = spellcurve._compared(caller_name, between, [], by, taken) -%}
    {%- set causes = spellcurve._checked_causes(caller_name, causes) -%}
    {%- do spellcurve._check_most_groups(caller_name, most_groups) -%}
    {%- set each = compared.each -%}
    {%- set segments = compared.segments -%}
    {%- set group = compared.group -%}
    {%- set segment = spellcurve._partition_by(segments) -%}
    {%- set of_group = spellcurve._partition_by(segments + ['group_number']) -%}
    {%- set so_far = of_group ~ 'order by duration rows between unbounded preceding and current row' -%}
    {%- set before = of_group ~ 'order by duration rows between unbounded preceding and 1 preceding' -%}
    {%- set at_duration = spellcurve._partition_by(segments + ['duration']) | trim -%}
    {%- set labels = [] -%}
    {%- for cause in causes -%}{%- do labels.append([cause, 'own']) -%}{%- endfor -%}
    {%- set carried = each ~ 'group_count, all_observed' -%}

    {%- set body -%}
with {{ spellcurve._cause_risk_sets(spells, compared.columns, none, 'fractional', labels) }},

{{ spellcurve._whole_numbers('numbers', 'number', 1, most_groups) }},

numbered_risk_sets as (
    select
        {{ each -}}
        dense_rank() over ({{ segment }}order by case when {{ group }} is null then 1 else 0 end, {{ group }}) as group_number,
        duration, at_risk, events,
        all_events - events as other_events,
        sum(all_events) over ({{ at_duration }}) as ending_at_duration
    from cause_risk_sets
),

counted_risk_sets as (
    select
        {{ each }}group_number, duration, at_risk, events, other_events, ending_at_duration,
        max(group_number) over ({{ segment | trim }}) as group_count
    from numbered_risk_sets
),

-- every group at every duration, with its number at risk where it has a row of its own
group_cells as (
    select
        {{ each }}duration, number as group_number,
        max(group_count) as group_count,
        max(case when group_number = number then at_risk end) as own_at_risk,
        sum(case when group_number = number then events else 0 end) as events,
        sum(case when group_number = number then other_events else 0 end) as other_events,
        max(ending_at_duration) as ending_at_duration
    from counted_risk_sets
    inner join numbers on number <= group_count
    group by {{ each }}duration, number
),

-- between two of its own rows a group keeps the number at risk of the later one
group_cells_with_steps_to_come as (
    select
        *,
        count(own_at_risk) over ({{ of_group }}order by duration desc rows between unbounded preceding and current row) as steps_to_come
    from group_cells
),

full_cells as (
    select
        {{ each }}duration, group_number, group_count, events, other_events, ending_at_duration,
        coalesce(max(own_at_risk) over (
            {{ spellcurve._partition_by(segments + ['group_number', 'steps_to_come']) | trim }}
        ), 0) as at_risk
    from group_cells_with_steps_to_come
),

hazards as (
    select
        {{ each }}duration, group_number, group_count, events, other_events, at_risk,
        case when events + other_events > 0 then (events + other_events) / (2 * at_risk - events - other_events) else 0 end as thin_share,
        case
            when events + other_events > 0 and events + other_events >= at_risk * (1 - 1e-12) then 1
            else 0
        end as takes_all,
        events + other_events as ended
    from full_cells
    where ending_at_duration > 0 or duration = 0
),

hazard_steps as (
    select
        {{ each }}duration, group_number, group_count, events, other_events, at_risk,
        {{ spellcurve._log_step('ended', 'at_risk') }} as log_step
    from hazards
),

running_sums as (
    select
        {{ each }}duration, group_number, group_count, events, other_events, at_risk,
        sum(log_step) over ({{ so_far }}) as log_survival,
        coalesce(sum(log_step) over ({{ before }}), 0) as log_survival_before
    from hazard_steps
),

survivals as (
    select
        {{ each }}duration, group_number, group_count, events, other_events, at_risk,
        {{ spellcurve._survival_of('log_survival') }} as survival,
        {{ spellcurve._survival_of('log_survival_before') }} as survival_before
    from running_sums
),

-- at risk in the sense of Gray: those still there, and those who would be had no other cause taken them
adjusted_cells as (
    select
        {{ each }}duration, group_number, group_count, events, other_events, at_risk, survival, survival_before,
        case when survival_before > 0 then at_risk / survival_before else 0 end as reach,
        case when survival_before > 0 and at_risk > 0 then events else 0 end as counted_events,
        coalesce(sum(case when at_risk > 0 then survival_before * events / at_risk else 0 end) over ({{ before }}), 0) as incidence_before
    from survivals
),

totals as (
    select
        {{ each }}duration, group_number, group_count, counted_events, other_events, at_risk, survival, survival_before, reach,
        reach * (1 - incidence_before) as gray_at_risk,
        sum(counted_events) over ({{ at_duration }}) as all_events,
        sum(reach) over ({{ at_duration }}) as all_reach,
        sum(reach * (1 - incidence_before)) over ({{ at_duration }}) as all_gray_at_risk
    from adjusted_cells
),

pooled_steps as (
    select
        *,
        case when all_reach > 0 then all_events / all_reach else 0 end as pooled_step,
        case
            when all_gray_at_risk > 0 then counted_events - all_events * (gray_at_risk / all_gray_at_risk)
            else 0
        end as score_step
    from totals
),

pooled_incidences as (
    select
        *,
        sum(pooled_step) over ({{ so_far }}) as pooled_incidence,
        coalesce(sum(pooled_step) over ({{ before }}), 0) as pooled_before,
        sum(score_step) over ({{ of_group | trim }}) as score,
        sum(counted_events) over ({{ segment | trim }}) as all_observed
    from pooled_steps
),

-- what the terms of the variance of one group at one duration are multiplied with, ties corrected for
factors as (
    select
        {{ each }}duration, group_number, group_count, reach, all_reach, score, all_observed, survival,
        case when pooled_before < 1 then pooled_step / (1 - pooled_before) else 0 end as covariance_weight,
        case when survival > 0 then (1 - pooled_incidence) / survival else 0 end as ratio,
        case
            when reach > 0 and all_events > 0
                then pooled_step * (survival_before / at_risk) * case
                    when all_events > 1 and all_reach * survival_before > all_events
                        then 1 - (all_events - 1) / (all_reach * survival_before - 1)
                    when all_events > 1 then 0
                    else 1
                end
            else 0
        end as own_factor,
        case
            when survival > 0 and other_events > 0
                then (survival_before / at_risk) * (survival_before / at_risk) * other_events * case
                    when other_events > 1 then 1 - (other_events - 1) / (at_risk - 1)
                    else 1
                end
            else 0
        end as other_factor
    from pooled_incidences
),

roles as (
    select 1 as role
    union all
    select 2 as role
),

-- the part of the score of group `scored` that the events of group `bearer` have
shares_of_scores as (
    select
        {{ each }}duration,
        case role when 1 then group_number else number end as bearer,
        case role when 1 then number else group_number end as scored,
        max(group_count) as group_count,
        max(all_observed) as all_observed,
        max(case when role = 1 then reach end) as bearer_reach,
        max(case when role = 2 then reach end) as scored_reach,
        max(case when role = 2 then score end) as score,
        max(all_reach) as all_reach,
        max(case when role = 1 then covariance_weight end) as covariance_weight,
        max(case when role = 1 then case when survival > 0 then 1 - ratio else 1 end end) as own_ratio,
        max(case when role = 1 then ratio end) as other_ratio,
        max(case when role = 1 then own_factor end) as own_factor,
        max(case when role = 1 then other_factor end) as other_factor
    from factors
    inner join numbers on number <= group_count
    cross join roles
    group by
        {{ each }}duration,
        case role when 1 then group_number else number end,
        case role when 1 then number else group_number end
),

direct_shares as (
    select
        {{ each }}duration, bearer, scored, group_count, all_observed, score, covariance_weight, own_ratio, other_ratio, own_factor,
        other_factor,
        case
            when all_reach <= 0 then 0
            when bearer = scored then bearer_reach * ((all_reach - bearer_reach) / all_reach)
            else 0 - bearer_reach * (scored_reach / all_reach)
        end as direct
    from shares_of_scores
),

shares_to_come as (
    select
        {{ each }}duration, bearer, scored, group_count, all_observed, score, own_ratio, other_ratio, own_factor, other_factor, direct,
        coalesce(sum(direct * covariance_weight) over (
            {{ spellcurve._partition_by(segments + ['bearer', 'scored']) -}}
            order by duration desc rows between unbounded preceding and 1 preceding
        ), 0) as to_come
    from direct_shares
),

terms as (
    select
        {{ each }}duration, bearer, scored, group_count, all_observed, score, own_factor, other_factor,
        direct + own_ratio * to_come as own_term,
        other_ratio * to_come as other_term
    from shares_to_come
),

-- both groups of a pair, side by side
paired_terms as (
    select
        {{ each }}duration, bearer,
        least(scored, number) as first_group,
        greatest(scored, number) as second_group,
        max(group_count) as group_count,
        max(all_observed) as all_observed,
        max(case when scored <= number then score end) as score,
        max(own_factor) as own_factor,
        max(other_factor) as other_factor,
        {%- for name in ['own_term', 'other_term'] %}
        max(case when scored <= number then {{ name }} end) as first_{{ name }},
        max(case when scored >= number then {{ name }} end) as second_{{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from terms
    inner join numbers on number <= group_count
    group by {{ each }}duration, bearer, least(scored, number), greatest(scored, number)
),

covariances as (
    select
        {{ each }}first_group, second_group,
        max(group_count) as group_count,
        max(all_observed) as all_observed,
        max(score) as score,
        sum(first_own_term * second_own_term * own_factor + first_other_term * second_other_term * other_factor) as covariance
    from paired_terms
    group by {{ each }}first_group, second_group
),

{{ spellcurve._whole_numbers('places', 'place', 1, 5) }},

-- the covariances off the diagonal, their signs turned, bordered in row and column 0 by the scores
matrix_0 as (
    select
        {{ carried }},
        case place when 1 then first_group when 2 then second_group when 3 then first_group else 0 end as row_at,
        case place when 1 then second_group when 2 then first_group when 4 then first_group else 0 end as column_at,
        case when place <= 2 then 0 - covariance when place <= 4 then score else 0 end as figure,
        0 as rank_so_far
    from covariances
    inner join places
        on
            (first_group < second_group and place <= 2)
            or (first_group = second_group and (place in (3, 4) or (place = 5 and first_group = 1)))
),

{{ spellcurve._eliminate('matrix', most_groups - 1, segments, carried) }},

judged as (
    select
        {{ carried }}, figure, rank_so_far,
        case
            when group_count > {{ most_groups }} then 'too_many_groups'
            when group_count = 1 then 'one_group'
            when not all_observed > 0 then 'no_events'
            when rank_so_far = 0 then 'nothing_to_compare'
            when rank_so_far < group_count - 1 then 'fewer_degrees_of_freedom'
            else 'compared'
        end as status
    from matrix_eliminated
    where row_at = 0 and column_at = 0
),

tested as (
    select
        {{ each }}status,
        case when status in ('compared', 'fewer_degrees_of_freedom') then greatest(0, figure) end as statistic,
        case when status in ('compared', 'fewer_degrees_of_freedom') then rank_so_far end as degrees_of_freedom
    from judged
),

{{ spellcurve._tail_steps('tested', 'chi', 'statistic', 'degrees_of_freedom', most_groups - 1) }}

select
    {{ spellcurve._aliases_as(segments, compared.by) }}{{ spellcurve._double('statistic') }} as statistic,
    {{ spellcurve._integer('degrees_of_freedom') }} as degrees_of_freedom,
    {{ spellcurve._double(spellcurve._tail('chi', 'statistic')) }} as p_value,
    status
from chi_halves
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'between': between, 'causes': causes, 'by': compared.by, 'most_groups': most_groups
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
