{% macro difference_in_mean_count(counts, between, durations, reference, by=[], confidence=0.95) %}
    {%- do spellcurve._check_call(
        'difference_in_mean_count',
        {'counts': counts, 'between': between, 'durations': durations, 'reference': reference},
        ['counts', 'between', 'durations', 'reference', 'by', 'confidence'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('difference_in_mean_count', 'spellcurve')(counts, between, durations, reference, by, confidence)) }}
{% endmacro %}


{% macro default__difference_in_mean_count(counts, between, durations, reference, by, confidence) %}
    {%- set caller_name = 'difference_in_mean_count' -%}
    {%- set compared = spellcurve._compared(caller_name, between, [], by, spellcurve._mean_cumulative_count_columns() + [
        'group_a', 'group_b', 'mean_count_a', 'mean_count_b', 'difference', 'difference_lower', 'difference_upper', 'p_value', 'ratio',
        'ratio_lower', 'ratio_upper', 'status'
    ]) -%}
    {%- set durations = spellcurve._check_whole_list(caller_name, 'durations', durations, 0) -%}
    {%- do spellcurve._check_reference(caller_name, reference, true, 'groups are compared with one of them') -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- set each, group = compared.each, compared.group -%}
    {%- set of_group = spellcurve._partition_by(compared.segments + [group]) -%}
    {%- set of_all = spellcurve._partition_by(compared.segments + ['wanted']) | trim -%}
    {%- set z = spellcurve._double_literal(spellcurve._normal_quantile(0.5 + confidence / 2)) -%}
    {%- set body -%}
with published_rows as (
    select
        {{ spellcurve._columns_as(compared.columns, compared.segments + [group]) }}{{ spellcurve._integer('duration') }} as duration,
        {{ spellcurve._double('mean_count') }} as mean_count,
        {{ spellcurve._double('std_error') }} as std_error
    from {{ counts }}
),

rows_with_neighbours as (
    select
        {{ each }}{{ group }}, duration, mean_count, std_error,
        lag(duration) over ({{ of_group }}order by duration) as previous_duration,
        lead(duration) over ({{ of_group }}order by duration) as next_duration
    from published_rows
),

{{ spellcurve._listed('durations_wanted', 'wanted', durations) }},

-- each group as it stands at each duration; beyond its follow-up nothing is known
rows_in_force as (
    select
        {{ each }}{{ spellcurve._as_text(group) }} as group_a,
        case when {{ spellcurve._is_reference(group, reference) }} then 1 else 0 end as is_reference,
        wanted,
        case when duration <= wanted and (next_duration is not null or duration = wanted) then 1 else 0 end as is_followed,
        mean_count, std_error
    from rows_with_neighbours
    cross join durations_wanted
    where {{ spellcurve._is_in_force('wanted') }}
),

pairs as (
    select
        {{ each }}group_a, is_reference, wanted, is_followed, mean_count, std_error,
        max(is_reference) over ({{ of_all }}) as has_reference,
        max(case when is_reference = 1 then is_followed end) over ({{ of_all }}) as reference_followed,
        max(case when is_reference = 1 then mean_count end) over ({{ of_all }}) as reference_count,
        max(case when is_reference = 1 then std_error end) over ({{ of_all }}) as reference_error
    from rows_in_force
),

pairs_judged as (
    select
        {{ each }}group_a, wanted, has_reference, mean_count, std_error, reference_count, reference_error,
        case
            when has_reference = 0 then 'reference_not_found'
            when is_followed = 0 or reference_followed = 0 then 'beyond_follow_up'
            when mean_count is null or reference_count is null then 'too_few_at_risk'
            when std_error is null or reference_error is null then 'no_std_error'
            else 'compared'
        end as status
    from pairs
    where is_reference = 0
),

differences as (
    select
        {{ each }}group_a, wanted, status,
        case when status in ('compared', 'no_std_error') then mean_count end as mean_count_a,
        case when status in ('compared', 'no_std_error') then reference_count end as mean_count_b,
        case when status in ('compared', 'no_std_error') then mean_count - reference_count end as difference,
        case when status = 'compared' then sqrt(std_error * std_error + reference_error * reference_error) end as std_error,
        case
            when status = 'compared' and mean_count > 0 and reference_count > 0
                then sqrt(
                    std_error / mean_count * (std_error / mean_count)
                    + reference_error / reference_count * (reference_error / reference_count)
                )
        end as relative_error
    from pairs_judged
),

statistics as (
    select
        {{ each }}group_a, wanted, status, mean_count_a, mean_count_b, difference, std_error, relative_error,
        case when std_error > 0 then difference / std_error * (difference / std_error) end as statistic
    from differences
),

{{ spellcurve._tail_steps('statistics', 'chi', 'statistic') }}

select
    {{ spellcurve._aliases_as(compared.segments, compared.by) }}group_a,
    {{ spellcurve._text(reference) }} as group_b,
    {{ spellcurve._integer('wanted') }} as duration,
    {{ spellcurve._double('mean_count_a') }} as mean_count_a,
    {{ spellcurve._double('mean_count_b') }} as mean_count_b,
    {{ spellcurve._double('difference') }} as difference,
    {{ spellcurve._double('std_error') }} as std_error,
    {{ spellcurve._double('difference - ' ~ z ~ ' * std_error') }} as difference_lower,
    {{ spellcurve._double('difference + ' ~ z ~ ' * std_error') }} as difference_upper,
    {{ spellcurve._double(spellcurve._tail('chi', 'statistic')) }} as p_value,
    {%- set ratio = 'case when mean_count_b > 0 then mean_count_a / mean_count_b end' %}
    {{ spellcurve._double(ratio) }} as ratio,
    {%- for name, sign in [('ratio_lower', '0 - '), ('ratio_upper', '')] %}
    {{ spellcurve._double(
        'case when relative_error is not null then mean_count_a / mean_count_b * '
        ~ spellcurve._exp(sign ~ z ~ ' * relative_error') ~ ' end'
    ) }} as {{ name }},
    {%- endfor %}
    status
from chi_halves
    {%- endset -%}
    {{ return(
        spellcurve._provenance(caller_name, {'counts': counts}, {
            'between': between, 'durations': durations, 'reference': reference, 'by': compared.by, 'confidence': confidence
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
