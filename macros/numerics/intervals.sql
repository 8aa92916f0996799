{# Exponentials and logarithms that every warehouse accepts, and the bounds of intervals. #}

{#
    exp(x), held away from what would be too large or too small to keep: some warehouses raise an error there.
    sign: 1 where x is never negative, -1 where it is never positive, so that one side suffices.
#}
{% macro _exp(x, sign=0) %}
    {%- set not_too_large = x if sign < 0 else 'least(700, ' ~ x ~ ')' -%}
    {{ return('exp(' ~ (not_too_large if sign > 0 else 'greatest(-700, ' ~ not_too_large ~ ')') ~ ')') }}
{% endmacro %}


{# A number as a double literal: with an exponent no warehouse takes it for a decimal of few digits. #}
{% macro _double_literal(number) %}
    {{ return(number | string if 'e' in number | string else (number | string) ~ 'e0') }}
{% endmacro %}


{#
    ln(1 - events / at_risk) for events < at_risk, precise to the last digits also where events are few among very many:
    with z = d / (2n - d) it is -2 atanh(z), whose series is used where z is small. `z` is the name of a column that holds it.
#}
{% macro _log_of_share_left(events, at_risk, z) %}
    {%- set square = z ~ ' * ' ~ z -%}
    {{ return(
        'case when ' ~ z ~ ' < 0.01e0 then -2 * ' ~ z ~ ' * (1 + ' ~ square ~ ' * (0.33333333333333333e0 + ' ~ square
        ~ ' * (0.2e0 + ' ~ square ~ ' * (0.14285714285714286e0 + ' ~ square ~ ' * 0.11111111111111111e0))))'
        ~ ' else ln((' ~ at_risk ~ ' - ' ~ events ~ ') / ' ~ at_risk ~ ') end'
    ) }}
{% endmacro %}


{#
    Logarithms of survival are summed. Where a step takes everyone the logarithm is minus infinity, for which not every warehouse has a
    number: -1e100 stands in, to which no sum of other steps comes near (none is below -28).
#}
{% macro _log_of_nothing_left() %}
    {{ return('-1e100') }}
{% endmacro %}


{# The logarithm that a step adds, from the columns takes_all (1 where it takes everyone) and thin_share (`z` of _log_of_share_left). #}
{% macro _log_step(events, at_risk) -%}
case
            when takes_all = 1 then {{ spellcurve._log_of_nothing_left() }}
            when {{ events }} > 0 then {{ spellcurve._log_of_share_left(events, at_risk, 'thin_share') }}
            else 0
        end
{%- endmacro %}


{% macro _is_nothing_left(log_survival) %}
    {{ return(log_survival ~ ' < -1e50') }}
{% endmacro %}


{# Survival from the sum of its logarithms: exactly 0 once a step has taken everyone. #}
{% macro _survival_of(log_survival) %}
    {{ return('case when ' ~ spellcurve._is_nothing_left(log_survival) ~ ' then 0 else ' ~ spellcurve._exp(log_survival, -1) ~ ' end') }}
{% endmacro %}


{% macro _interval_scales() %}
    {{ return(['linear', 'log', 'log-log', 'logit', 'arcsine']) }}
{% endmacro %}


{#
    One bound of the interval of a product-limit survival (Borgan and Liestøl 1990), for 0 < survival < 1.
    log_survival: its natural logarithm. relative_error: std_error / survival, the root of Greenwood's sum. z: a positive number;
    side: -1 for the lower bound, 1 for the upper.
#}
{% macro _survival_bound(interval_scale, survival, log_survival, relative_error, z, side) %}
    {%- set forth = spellcurve._double_literal(side * z) ~ ' * ' ~ relative_error -%}
    {%- set back = spellcurve._double_literal(0 - side * z) ~ ' * ' ~ relative_error -%}
    {%- if interval_scale == 'linear' -%}
        {%- set bound = 'least(1, greatest(0, ' ~ survival ~ ' * (1 + ' ~ forth ~ ')))' -%}
    {%- elif interval_scale == 'log' -%}
        {%- set bound = 'least(1, ' ~ survival ~ ' * ' ~ spellcurve._exp(forth, side) ~ ')' -%}
    {%- elif interval_scale == 'log-log' -%}
        {#- the larger bound has the smaller cumulative hazard -#}
        {%- set factor = spellcurve._exp(back ~ ' / (0 - ' ~ log_survival ~ ')', 0 - side) -%}
        {%- set bound = spellcurve._exp(log_survival ~ ' * ' ~ factor, -1) -%}
    {%- elif interval_scale == 'logit' -%}
        {%- set odds_factor = spellcurve._exp(back ~ ' / (1 - ' ~ survival ~ ')', 0 - side) -%}
        {%- set bound = survival ~ ' / (' ~ survival ~ ' + (1 - ' ~ survival ~ ') * ' ~ odds_factor ~ ')' -%}
    {%- else -%}
        {%- set angle = 'asin(sqrt(' ~ survival ~ ')) + ' ~ forth ~ ' * sqrt(' ~ survival ~ ' / (1 - ' ~ survival ~ ')) / 2' -%}
        {%- set half_pi = '1.5707963267948966e0' -%}
        {%- set kept = 'least(' ~ half_pi ~ ', greatest(0, ' ~ angle ~ '))' -%}
        {%- set bound = 'sin(' ~ kept ~ ') * sin(' ~ kept ~ ')' -%}
    {%- endif -%}
    {{ return(bound) }}
{% endmacro %}
