{% macro survival_quantiles(curve, shares=[0.5], by=[]) %}
    {%- do spellcurve._check_call(
        'survival_quantiles', {'curve': curve, 'shares': shares}, ['curve', 'shares', 'by'], kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('survival_quantiles', 'spellcurve')(curve, shares, by)) }}
{% endmacro %}


{#
    The survival at which a share has had the event. 1 - 0.999 is not 0.001 in binary, and the difference counts where the level is small:
    so the digits are subtracted, not the numbers.
#}
{% macro _level_of_share(share) %}
    {%- set text = share | string -%}
    {%- if share > 0.5 and modules.re.match('^0[.][0-9]+$', text) -%}
        {%- set digits = text[2:] -%}
        {{ return((10 ** (digits | length) - digits | int) / 10 ** (digits | length)) }}
    {%- endif -%}
    {{ return(1 - share) }}
{% endmacro %}


{% macro default__survival_quantiles(curve, shares, by) %}
    {%- set caller_name = 'survival_quantiles' -%}
    {%- set by = spellcurve._check_columns(
        caller_name, 'by', by,
        spellcurve._survival_curve_columns() + ['share', 'duration_lower', 'duration_upper', 'status']
    ) -%}
    {%- set shares = spellcurve._check_values(caller_name, 'shares', shares) -%}
    {%- for share in shares -%}
        {%- do spellcurve._check_share(caller_name, 'shares', share) -%}
        {%- if share in shares[:loop.index0] -%}
            {%- do spellcurve._fail(caller_name, 'shares names ' ~ share ~ ' twice; name it once.') -%}
        {%- endif -%}
    {%- endfor -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set limits = ['survival', 'survival_lower', 'survival_upper'] -%}
    {%- set body -%}
with {{ spellcurve._curve_rows(curve, by) }},

-- a product of logarithms can land a hair above a level that it meets exactly
levels as (
    {%- for share in shares %}
    {%- set level = spellcurve._level_of_share(share) * (1 + 1e-9) %}
    select
        {{ spellcurve._double(spellcurve._double_literal(share)) }} as share,
        {{ spellcurve._double(spellcurve._double_literal(level)) }} as highest
    {%- if not loop.last %}
    union all
    {%- endif %}
    {%- endfor %}
),

-- what follows a row without figures may have happened at that row already
first_rows_below as (
    select
        {{ each_group }}share,
        max(is_several_curves) as is_several_curves,
        {%- for name in limits %}
        min(case when {{ name }} <= highest then duration end) as first_{{ name }},
        min(case when {{ name }} <= highest and follows_a_gap = 0 then duration end) as known_{{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from curve_rows
    cross join levels
    group by {{ each_group }}share
),

quantiles as (
    select
        {{ each_group }}share,
        {%- for name in limits %}
        case when is_several_curves = 0 and first_{{ name }} = known_{{ name }} then known_{{ name }} end as at_{{ name }},
        {%- endfor %}
        case
            when is_several_curves = 1 then 'several_curves'
            when first_survival is null then 'not_reached'
            when first_survival = known_survival then 'reached'
            else 'too_few_at_risk'
        end as status
    from first_rows_below
)

select
    {{ spellcurve._aliases_as(groups, by) }}share,
    at_survival as duration,
    at_survival_lower as duration_lower,
    at_survival_upper as duration_upper,
    status
from quantiles
    {%- endset -%}

    {{ return(spellcurve._provenance(caller_name, {'curve': curve}, {'shares': shares, 'by': by}) ~ '\n' ~ body) }}
{% endmacro %}
