{% macro events_needed(hazard_ratio, power=0.8, alpha=0.05, allocation=0.5, sides=2) %}
    {%- do spellcurve._check_call(
        'events_needed', {'hazard_ratio': hazard_ratio}, ['hazard_ratio', 'power', 'alpha', 'allocation', 'sides'], kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('events_needed', 'spellcurve')(hazard_ratio, power, alpha, allocation, sides)) }}
{% endmacro %}


{# How many events a comparison needs, as a number, not rounded (Schoenfeld 1981). Checks the call. #}
{% macro _schoenfeld(caller_name, hazard_ratio, power, alpha, allocation, sides) %}
    {%- if hazard_ratio is boolean or hazard_ratio is not number or hazard_ratio <= 0 or hazard_ratio == 1 -%}
        {%- do spellcurve._fail(
            caller_name,
            'hazard_ratio is ' ~ spellcurve._shown(hazard_ratio) ~ '; it must be a number above 0 that is not 1, the smallest ratio that matters.'
        ) -%}
    {%- endif -%}
    {%- for name, value in [('power', power), ('alpha', alpha), ('allocation', allocation)] -%}
        {%- do spellcurve._check_share(caller_name, name, value) -%}
    {%- endfor -%}
    {%- if sides is boolean or sides not in [1, 2] -%}
        {%- do spellcurve._fail(caller_name, 'sides is ' ~ spellcurve._shown(sides) ~ '; it must be 1 or 2.') -%}
    {%- endif -%}
    {%- if power <= alpha / sides -%}
        {%- do spellcurve._fail(
            caller_name,
            'power is ' ~ power ~ ', which chance alone gives at an alpha of ' ~ alpha ~ '; it must be above alpha'
            ~ (' / 2.' if sides == 2 else '.')
        ) -%}
    {%- endif -%}
    {#- the two quantiles are those of upper tails, so that a small alpha keeps its digits -#}
    {%- set reach = 0 - spellcurve._normal_quantile(alpha / sides) + spellcurve._normal_quantile(power) -%}
    {%- set log_ratio = spellcurve._logarithm(hazard_ratio) -%}
    {{ return(reach * reach / (allocation * (1 - allocation) * log_ratio * log_ratio)) }}
{% endmacro %}


{% macro _rounded_up(number) %}
    {%- set below = number | int -%}
    {{ return(below if number == below else below + 1) }}
{% endmacro %}


{% macro default__events_needed(hazard_ratio, power, alpha, allocation, sides) %}
    {%- set needed = spellcurve._schoenfeld('events_needed', hazard_ratio, power, alpha, allocation, sides) -%}
    {%- set options = {'hazard_ratio': hazard_ratio, 'power': power, 'alpha': alpha, 'allocation': allocation, 'sides': sides} -%}
    {%- set body -%}
select
    {%- for name in ['hazard_ratio', 'power', 'alpha', 'allocation'] %}
    {{ spellcurve._double(spellcurve._double_literal(options[name])) }} as {{ name }},
    {%- endfor %}
    {{ spellcurve._integer(sides) }} as sides,
    {{ spellcurve._double(spellcurve._double_literal(needed)) }} as events_exact,
    {{ spellcurve._integer(spellcurve._rounded_up(needed)) }} as events_needed
    {%- endset -%}
    {{ return(spellcurve._provenance('events_needed', {}, options) ~ '\n' ~ body) }}
{% endmacro %}
