{#
    Figures of groups set against those of a reference: what difference_at and difference_in_restricted_mean have in common, from the
    CTE `pairs` to the last select.

    cte has a row for each group at each of what is `wanted`: the segments, group_label, is_reference, wanted, figure, std_error, status of
    the figure ('observed', or why there is none), and position and spread: the figure and its standard error on the scale of the test.
    figure: its name in the result. at: the name of what is wanted. limit: SQL of the largest difference that there can be.
#}
{% macro _differences(cte, compared, reference, confidence, figure, at, limit) -%}
{%- set each = compared.each -%}
{%- set of_all = spellcurve._partition_by(compared.segments + ['wanted']) | trim -%}
{%- set z = spellcurve._double_literal(spellcurve._normal_quantile(0.5 + confidence / 2)) -%}
{%- set figure_a, figure_b = figure ~ '_a', figure ~ '_b' -%}
pairs as (
    select
        {{ each }}group_label, is_reference, wanted, figure, std_error, status, position, spread,
        max(is_reference) over ({{ of_all }}) as has_reference,
        {%- for name in ['figure', 'std_error', 'status', 'position', 'spread'] %}
        max(case when is_reference = 1 then {{ name }} end) over ({{ of_all }}) as reference_{{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from {{ cte }}
),

judged_pairs as (
    select
        {{ each }}group_label, wanted, figure, std_error, position, spread, reference_figure, reference_std_error, reference_position,
        reference_spread,
        case
            when has_reference = 0 then 'reference_not_found'
            {%- for status in ['several_curves', 'beyond_follow_up', 'too_few_at_risk'] %}
            when status = '{{ status }}' or reference_status = '{{ status }}' then '{{ status }}'
            {%- endfor %}
            when std_error is null or reference_std_error is null then 'no_std_error'
            else 'compared'
        end as status
    from pairs
    where is_reference = 0
),

differences as (
    select
        {{ each }}group_label, wanted, status,
        case when status in ('compared', 'no_std_error') then figure end as {{ figure_a }},
        case when status in ('compared', 'no_std_error') then reference_figure end as {{ figure_b }},
        case when status in ('compared', 'no_std_error') then figure - reference_figure end as difference,
        case
            when status = 'compared' then sqrt(std_error * std_error + reference_std_error * reference_std_error)
        end as std_error,
        case
            when status = 'compared' and figure > 0 and reference_figure > 0
                then sqrt(
                    std_error / figure * (std_error / figure)
                    + reference_std_error / reference_figure * (reference_std_error / reference_figure)
                )
        end as relative_error,
        case
            when status = 'compared' and (spread > 0 or reference_spread > 0)
                then (position - reference_position) * (position - reference_position)
                    / (spread * spread + reference_spread * reference_spread)
        end as statistic
    from judged_pairs
),

differences_with_ratios as (
    select
        {{ each }}group_label, wanted, status, {{ figure_a }}, {{ figure_b }}, difference, std_error, relative_error, statistic,
        case when {{ figure_b }} > 0 then {{ figure_a }} / {{ figure_b }} end as ratio,
        case
            when relative_error > 0
                then ln({{ figure_a }} / {{ figure_b }}) / relative_error * (ln({{ figure_a }} / {{ figure_b }}) / relative_error)
        end as ratio_statistic
    from differences
),

{{ spellcurve._tail_steps('differences_with_ratios', 'chi', 'statistic') }},

{{ spellcurve._tail_steps('chi_halves', 'ratio_chi', 'ratio_statistic') }}

select
    {{ spellcurve._aliases_as(compared.segments, compared.by) }}group_label as group_a,
    {{ spellcurve._text(reference) }} as group_b,
    {{ spellcurve._integer('wanted') }} as {{ at }},
    {{ spellcurve._double(figure_a) }} as {{ figure_a }},
    {{ spellcurve._double(figure_b) }} as {{ figure_b }},
    {{ spellcurve._double('difference') }} as difference,
    {{ spellcurve._double('std_error') }} as std_error,
    case
        when std_error is not null then greatest({{ spellcurve._double('0 - ' ~ limit) }}, {{ spellcurve._double('difference - ' ~ z ~ ' * std_error') }})
    end as difference_lower,
    case
        when std_error is not null then least({{ spellcurve._double(limit) }}, {{ spellcurve._double('difference + ' ~ z ~ ' * std_error') }})
    end as difference_upper,
    {{ spellcurve._double(spellcurve._tail('chi', 'statistic')) }} as p_value,
    {{ spellcurve._double('ratio') }} as ratio,
    {%- for name, sign in [('ratio_lower', '0 - '), ('ratio_upper', '')] %}
    {{ spellcurve._double(
        'case when relative_error is not null then ratio * ' ~ spellcurve._exp(sign ~ z ~ ' * relative_error') ~ ' end'
    ) }} as {{ name }},
    {%- endfor %}
    {{ spellcurve._double(spellcurve._tail('ratio_chi', 'ratio_statistic')) }} as ratio_p_value,
    status
from ratio_chi_halves
{%- endmacro %}


{# The columns that a result of _differences has beside those of `by`. #}
{% macro _difference_columns(figure, at) %}
    {{ return([
        'group_a', 'group_b', at, figure ~ '_a', figure ~ '_b', 'difference', 'std_error', 'difference_lower', 'difference_upper',
        'p_value', 'ratio', 'ratio_lower', 'ratio_upper', 'ratio_p_value', 'status'
    ]) }}
{% endmacro %}
