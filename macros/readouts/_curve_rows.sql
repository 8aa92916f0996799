{#
    What every read-out begins with: the CTEs that end with `curve_rows`, the curve under the read-outs' own names, each row with the rows
    before and after it in its group.

    is_several_curves is 1 where a group has two rows at one duration: then `by` leaves out a column that the curve has, and
    no figure can be read off. Where survival is null (too few at risk) a row is there and its figures are not.
#}
{% macro _curve_rows(curve, by) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
published_rows as (
    select
        {{ spellcurve._columns_as(by, groups) }}{{ spellcurve._integer('duration') }} as duration,
        at_risk, events, censored,
        {%- for name in ['survival', 'std_error', 'survival_lower', 'survival_upper'] %}
        {{ spellcurve._double(name) }} as {{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from {{ curve }}
),

rows_with_end as (
    select
        {{ each_group }}duration, at_risk, events, censored, survival, std_error, survival_lower, survival_upper,
        max(duration) over ({{ partition | trim }}) as last_duration,
        min(case when survival = 0 then duration end) over ({{ partition | trim }}) as ended_at
    from published_rows
),

-- once 0, survival is 0 for ever, however few are at risk
rows_with_survival as (
    select
        {{ each_group }}duration, at_risk, events, censored, std_error, survival_lower, survival_upper, last_duration, ended_at,
        case when duration >= ended_at then 0 else survival end as survival
    from rows_with_end
),

rows_with_neighbours as (
    select
        {{ each_group }}duration, at_risk, events, censored, survival, std_error, survival_lower, survival_upper, last_duration, ended_at,
        lag(duration) over ({{ partition }}order by duration) as previous_duration,
        lag(case when survival is null then 1 else 0 end) over ({{ partition }}order by duration) as follows_a_gap,
        lead(duration) over ({{ partition }}order by duration) as next_duration,
        lead(survival) over ({{ partition }}order by duration) as next_survival,
        lead(at_risk) over ({{ partition }}order by duration) as next_at_risk
    from rows_with_survival
),

curve_rows as (
    select
        {{ each_group }}duration, at_risk, events, censored, survival, std_error, survival_lower, survival_upper, last_duration, ended_at,
        previous_duration, coalesce(follows_a_gap, 0) as follows_a_gap, next_duration, next_survival, next_at_risk,
        max(case when next_duration = duration then 1 else 0 end) over ({{ partition | trim }}) as is_several_curves
    from rows_with_neighbours
)
{%- endmacro %}


{# The CTE that lists values known when the model compiles. #}
{% macro _listed(cte, column, values) -%}
{{ cte }} as (
    {%- for value in values %}
    select {{ value }} as {{ column }}
    {%- if not loop.last %}
    union all
    {%- endif %}
    {%- endfor %}
)
{%- endmacro %}


{#
    The condition by which a row of `curve_rows` is the one in force at a duration: the last that is not after it. Where all are after
    it, the first, so that no group is lost.
#}
{% macro _is_in_force(at) %}
    {{ return(
        '(duration <= ' ~ at ~ ' or previous_duration is null) and (next_duration > ' ~ at ~ ' or next_duration is null)'
    ) }}
{% endmacro %}


{# What the row in force says of survival at a duration; with `of_survivors`, of those who got that far. #}
{% macro _status_at(at, of_survivors=false) %}
    {%- set ended = 'when ended_at <= ' ~ at ~ " then 'none_survived'" if of_survivors else "when survival = 0 then 'observed'" -%}
    {{ return(
        "case when is_several_curves = 1 then 'several_curves'"
        ~ ' when duration > ' ~ at ~ " then 'beyond_follow_up'"
        ~ ' ' ~ ended
        ~ ' when duration < ' ~ at ~ " and next_duration is null then 'beyond_follow_up'"
        ~ " when survival is null then 'too_few_at_risk'"
        ~ ' when duration < ' ~ at ~ " and next_survival is null then 'too_few_at_risk'"
        ~ " else 'observed' end"
    ) }}
{% endmacro %}


{# How many are at risk at a duration, as far as the row in force and the one after it tell. #}
{% macro _at_risk_at(at) %}
    {{ return(
        'case when duration = ' ~ at ~ ' then at_risk when next_duration is not null then next_at_risk'
        ~ ' when events + censored >= at_risk then 0 * at_risk end'
    ) }}
{% endmacro %}


{# A list of whole numbers, given as one or as a list, without repetition. #}
{% macro _check_whole_list(caller_name, argument, value, at_least) %}
    {%- set numbers = spellcurve._check_values(caller_name, argument, value) -%}
    {%- for number in numbers -%}
        {%- do spellcurve._check_whole(caller_name, argument, number, at_least) -%}
        {%- if number in numbers[:loop.index0] -%}
            {%- do spellcurve._fail(caller_name, argument ~ ' names ' ~ number ~ ' twice; name it once.') -%}
        {%- endif -%}
    {%- endfor -%}
    {{ return(numbers) }}
{% endmacro %}
