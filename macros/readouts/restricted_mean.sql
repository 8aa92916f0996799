{% macro restricted_mean(curve, horizon, by=[], survived=0, confidence=0.95) %}
    {%- do spellcurve._check_call(
        'restricted_mean', {'curve': curve, 'horizon': horizon}, ['curve', 'horizon', 'by', 'survived', 'confidence'], kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('restricted_mean', 'spellcurve')(curve, horizon, by, survived, confidence)) }}
{% endmacro %}


{#
    One step of Greenwood's sum, d / (n (n - d)), read off a row of a curve: 0 where nobody had the event, and where all had, since
    survival is 0 from there on. Null where the curve hides or lacks a count.
#}
{% macro _greenwood_step() %}
    {%- set at_risk, events = spellcurve._double('at_risk'), spellcurve._double('events') -%}
    {{ return(
        'case when events is null or at_risk is null then null when events > 0 and events < at_risk * (1 - 1e-12) then '
        ~ events ~ ' / ' ~ at_risk ~ ' / (' ~ at_risk ~ ' - ' ~ events ~ ') else 0 end'
    ) }}
{% endmacro %}


{% macro default__restricted_mean(curve, horizon, by, survived, confidence) %}
    {%- set caller_name = 'restricted_mean' -%}
    {%- set by = spellcurve._check_columns(
        caller_name, 'by', by, spellcurve._survival_curve_columns()
        + ['survived', 'horizon', 'restricted_mean', 'restricted_mean_lower', 'restricted_mean_upper', 'status']
    ) -%}
    {%- do spellcurve._check_whole(caller_name, 'survived', survived, 0) -%}
    {%- set horizons = spellcurve._check_whole_list(caller_name, 'horizon', horizon, survived + 1) -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups + ['horizon']) -%}
    {%- set z = spellcurve._double_literal(spellcurve._normal_quantile(0.5 + confidence / 2)) -%}
    {#- the mean of all who began takes in those whose event came at 0; the mean of who survived is theirs alone -#}
    {%- set of_all = survived == 0 -%}
    {%- set body -%}
with {{ spellcurve._curve_rows(curve, by) }},

{{ spellcurve._listed('horizons', 'horizon', horizons) }},

-- each row from where it counts to where the next one takes over, or to the horizon
pieces as (
    select
        {{ each_group }}horizon, duration, next_duration, survival, next_survival, is_several_curves, last_duration, ended_at,
        {% if of_all -%}
        {{ spellcurve._greenwood_step() }} as greenwood_step,
        {%- else -%}
        case when duration > {{ survived }} then {{ spellcurve._greenwood_step() }} else 0 end as greenwood_step,
        {%- endif %}
        case when {{ spellcurve._is_in_force(survived) }} then 1 else 0 end as is_base,
        case
            when duration >= horizon then 0
            else least(coalesce(next_duration, horizon), horizon) - greatest(duration, {{ survived }})
        end as width
    from curve_rows
    cross join horizons
    where (next_duration > {{ survived }} or next_duration is null) and (duration < horizon or previous_duration is null)
),

-- what lies between a row and the horizon, summed from the horizon backwards so that nothing is subtracted
pieces_with_areas as (
    select
        {{ each_group }}horizon, duration, survival, is_several_curves, last_duration, ended_at, greenwood_step, is_base, width,
        case
            when width = 0 then 0
            when survival is null then 1
            when next_duration is null or next_survival is not null then 0
            when duration < {{ survived }} or least(next_duration, horizon) > duration + 1 then 1
            else 0
        end as is_gap,
        sum(survival * width) over ({{ partition }}order by duration desc rows between unbounded preceding and current row) as area_after
    from pieces
),

sums as (
    select
        {{ each_group }}horizon,
        max(is_several_curves) as is_several_curves,
        max(last_duration) as last_duration,
        min(ended_at) as ended_at,
        min(duration) as first_duration,
        max(is_gap) as has_gaps,
        max(case when area_after > 0 and greenwood_step is null then 1 else 0 end) as lacks_counts,
        max(case when is_base = 1 then {{ spellcurve._double('1') if of_all else 'survival' }} end) as survival_so_far,
        sum(survival * width) as area,
        sum(area_after * area_after * greenwood_step) as variance
    from pieces_with_areas
    group by {{ each_group }}horizon
),

sums_with_status as (
    select
        {{ each_group }}horizon, area, variance, lacks_counts,
        case when survival_so_far > 0 then survival_so_far end as survival_so_far,
        case
            when is_several_curves = 1 then 'several_curves'
            when first_duration > {{ survived }} then 'beyond_follow_up'
            {%- if not of_all %}
            when ended_at <= {{ survived }} then 'none_survived'
            {%- endif %}
            when last_duration < horizon and ended_at is null then 'beyond_follow_up'
            when has_gaps = 1 then 'too_few_at_risk'
            else 'observed'
        end as status
    from sums
),

means_observed as (
    select
        {{ each_group }}horizon, status,
        case when status = 'observed' then area / survival_so_far end as restricted_mean,
        case when status = 'observed' and lacks_counts = 0 then sqrt(variance) / survival_so_far end as std_error
    from sums_with_status
)

select
    {{ spellcurve._aliases_as(groups, by) }}
    {%- if survived > 0 %}{{ spellcurve._integer(survived) }} as survived,
    {% endif %}{{ spellcurve._integer('horizon') }} as horizon,
    restricted_mean,
    std_error,
    case when std_error is not null then greatest(0, restricted_mean - {{ z }} * std_error) end as restricted_mean_lower,
    case
        when std_error is not null then least({{ spellcurve._double('horizon - ' ~ survived) }}, restricted_mean + {{ z }} * std_error)
    end as restricted_mean_upper,
    status
from means_observed
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'curve': curve}, {
            'horizon': horizons, 'by': by, 'survived': survived, 'confidence': confidence
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
