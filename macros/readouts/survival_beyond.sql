{% macro survival_beyond(curve, survived, by=[], confidence=0.95, interval_scale='log-log') %}
    {%- do spellcurve._check_call(
        'survival_beyond', {'curve': curve, 'survived': survived}, ['curve', 'survived', 'by', 'confidence', 'interval_scale'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('survival_beyond', 'spellcurve')(curve, survived, by, confidence, interval_scale)) }}
{% endmacro %}


{% macro default__survival_beyond(curve, survived, by, confidence, interval_scale) %}
    {%- set caller_name = 'survival_beyond' -%}
    {%- set by = spellcurve._check_columns(
        caller_name, 'by', by, spellcurve._survival_curve_columns() + ['survived', 'expected_time', 'status']
    ) -%}
    {%- set survived = spellcurve._check_whole_list(caller_name, 'survived', survived, 0) -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- do spellcurve._check_choice(caller_name, 'interval_scale', interval_scale, spellcurve._interval_scales()) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups + ['survived']) -%}
    {%- set so_far = partition ~ 'order by duration rows between unbounded preceding and current row' -%}
    {%- set before = partition ~ 'order by duration rows between unbounded preceding and 1 preceding' -%}
    {%- set z = spellcurve._normal_quantile(0.5 + confidence / 2) -%}
    {%- set relative_variance = 'std_error / nullif(survival, 0) * std_error / nullif(survival, 0)' -%}
    {%- set body -%}
with {{ spellcurve._curve_rows(curve, by) }},

{{ spellcurve._listed('so_far', 'survived', survived) }},

rows_from_there as (
    select
        {{ each_group }}survived, next_duration, survival,
        case when duration <= survived or previous_duration is null then 1 else 0 end as is_base,
        greatest(duration, survived) as duration,
        case when duration <= survived then {{ spellcurve._at_risk_at('survived') }} else at_risk end as at_risk,
        case when duration > survived then {{ spellcurve._greenwood_step() }} else 0 end as greenwood_step,
        {{ relative_variance }} as relative_variance,
        case
            when next_duration is null or next_survival is not null or next_duration <= greatest(duration, survived) + 1 then 0
            else 1
        end as is_before_gap,
        {{ spellcurve._status_at('survived', of_survivors=true) }} as status
    from curve_rows
    cross join so_far
    where next_duration > survived or next_duration is null
),

rows_beside_base as (
    select
        {{ each_group }}survived, duration, next_duration, survival, is_base, at_risk, greenwood_step, relative_variance, is_before_gap,
        max(case when is_base = 1 then status end) over ({{ partition | trim }}) as base_status,
        max(case when is_base = 1 and status = 'observed' then survival end) over ({{ partition | trim }}) as base_survival,
        max(case when is_base = 1 then relative_variance end) over ({{ partition | trim }}) as base_variance
    from rows_from_there
),

conditional_shares as (
    select
        {{ each_group }}survived, duration, next_duration, is_base, at_risk, greenwood_step, relative_variance, is_before_gap, base_status,
        base_variance,
        survival / nullif(base_survival, 0) as share
    from rows_beside_base
    where base_status = 'observed' or is_base = 1
),

-- Greenwood's sum over the events since; where counts are hidden, the difference of the two standard errors has to do
running_sums as (
    select
        {{ each_group }}survived, duration, at_risk, base_status, share,
        case when share > 0 and share < 1 then share end as open_share,
        case
            when max(case when greenwood_step is null then 1 else 0 end) over ({{ so_far }}) = 0
                then sum(greenwood_step) over ({{ so_far }})
            else greatest(0, relative_variance - base_variance)
        end as variance,
        coalesce(sum(share * (next_duration - duration)) over ({{ before }}), 0) as expected_time,
        coalesce(max(case when share is null or is_before_gap = 1 then 1 else 0 end) over ({{ before }}), 0) as follows_a_gap
    from conditional_shares
),

figures as (
    select
        {{ each_group }}survived, duration, at_risk, share, open_share, expected_time, follows_a_gap,
        sqrt(variance) as relative_error,
        ln(open_share) as log_share,
        case
            when base_status <> 'observed' then base_status
            when share is null then 'too_few_at_risk'
            else 'observed'
        end as status
    from running_sums
)

select
    {{ spellcurve._aliases_as(groups, by) }}{{ spellcurve._integer('survived') }} as survived,
    duration,
    case when status in ('observed', 'too_few_at_risk') then at_risk end as at_risk,
    share as survival,
    case when share >= 1 then 0 else open_share * relative_error end as std_error,
    case
        when share >= 1 then 1
        when open_share > 0
            then {{ spellcurve._survival_bound(interval_scale, 'open_share', 'log_share', 'relative_error', z, -1) }}
    end as survival_lower,
    case
        when share >= 1 then 1
        when open_share > 0
            then {{ spellcurve._survival_bound(interval_scale, 'open_share', 'log_share', 'relative_error', z, 1) }}
    end as survival_upper,
    case when share is not null and follows_a_gap = 0 then expected_time end as expected_time,
    status
from figures
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'curve': curve}, {
            'survived': survived, 'by': by, 'confidence': confidence, 'interval_scale': interval_scale
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
