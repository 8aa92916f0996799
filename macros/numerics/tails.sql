{#
    Upper tails of the chi-square and of the normal distribution, good to about 1 part in 10^13 from 1 down to 10^-300, and 0 below.

    With y = x / 2 and whole degrees of freedom v, the tail of chi-square is exp(-y) times
        v even:  1 + y/1 (1 + y/2 (1 + y/3 (…)))                                           (v/2 terms)
        v odd:   exp(y) erfc(sqrt(y)) + sqrt(4y/pi) (1 + x/3 (1 + x/5 (1 + x/7 (…))))      ((v-1)/2 terms in the bracket)
    (Abramowitz and Stegun 1964, 26.4.4 and 26.4.5). No term is negative, so nothing cancels. exp(-y) comes as two equal factors, one
    on either side of the sum, so that neither is too small for a number while the tail is not.
    The complementary error function times exp(z^2) is the rational approximation of Cody 1969.
#}

{#
    Two CTEs, `<prefix>_roots` and `<prefix>_halves`: the rows of a CTE with what _tail('<prefix>') needs.
    statistic: a column, null or not negative. freedom: a column of whole numbers, or the number 1; most: the largest it can be.
#}
{% macro _tail_steps(cte, prefix, statistic, freedom=1, most=1) -%}
{%- set x = spellcurve._double(statistic) -%}
{{ prefix }}_roots as (
    select
        *,
        sqrt({{ x }} / 2) as {{ prefix }}_root,
        exp(0 - least(700, {{ x }} / 4)) as {{ prefix }}_decay
        {%- if freedom != 1 %},
        cast({{ freedom }} - 2 * floor({{ freedom }} / 2e0) as {{ dbt.type_int() }}) as {{ prefix }}_is_odd
        {%- endif %}
    from {{ cte }}
),

{{ prefix }}_halves as (
    select
        *,
        {{ prefix }}_decay * (
            {%- if freedom == 1 %}
            {{ spellcurve._scaled_erfc(prefix ~ '_root') }}
            {%- else %}
            {{ prefix }}_is_odd * ({{ spellcurve._scaled_erfc(prefix ~ '_root') }})
            {%- if most > 1 %}
            + case
                when {{ prefix }}_is_odd = 0 then 1
                when {{ freedom }} > 1 then 1.1283791670955126e0 * {{ prefix }}_root
                else 0
            end * {{ spellcurve._tail_series(x, freedom, prefix ~ '_is_odd', most) }}
            {%- endif %}
            {%- endif %}
        ) as {{ prefix }}_half
    from {{ prefix }}_roots
)
{%- endmacro %}


{# The tail itself, of the statistic given to _tail_steps. #}
{% macro _tail(prefix, statistic) %}
    {{ return(
        'case when ' ~ statistic ~ ' is null then null when ' ~ statistic ~ ' > 2800 or ' ~ prefix ~ '_half < 1e-307 / ' ~ prefix ~ '_decay then 0e0'
        ~ ' else least(1e0, ' ~ prefix ~ '_half * ' ~ prefix ~ '_decay) end'
    ) }}
{% endmacro %}


{% macro _tail_series(x, freedom, is_odd, most) %}
    {%- set series = namespace(sql='1') -%}
    {%- for k in range((most - 1) // 2, 0, -1) -%}
        {%- set ratio = x ~ ' / (' ~ 2 * k ~ ' + ' ~ is_odd ~ ')' -%}
        {%- set series.sql = '(1 + case when ' ~ freedom ~ ' >= ' ~ (2 * k + 2) ~ ' + ' ~ is_odd ~ ' then ' ~ ratio ~ ' * ' ~ series.sql
            ~ ' else 0 end)' -%}
    {%- endfor -%}
    {{ return(series.sql) }}
{% endmacro %}


{# exp(z^2) erfc(z) for z >= 0; z is the name of a column. #}
{% macro _scaled_erfc(z) %}
    {%- set square = z ~ ' * ' ~ z -%}
    {%- set near = spellcurve._horner(square, [
        3.20937758913846947e3, 3.77485237685302021e2, 1.13864154151050156e2, 3.16112374387056560e0, 1.85777706184603153e-1
    ]) ~ ' / ' ~ spellcurve._horner(square, [
        2.84423683343917062e3, 1.28261652607737228e3, 2.44024637934444173e2, 2.36012909523441209e1, 1.0
    ]) -%}
    {%- set middle = spellcurve._horner(z, [
        1.23033935479799725e3, 2.05107837782607147e3, 1.71204761263407058e3, 8.81952221241769090e2, 2.98635138197400131e2,
        6.61191906371416295e1, 8.88314979438837594e0, 5.64188496988670089e-1, 2.15311535474403846e-8
    ]) ~ ' / ' ~ spellcurve._horner(z, [
        1.23033935480374942e3, 3.43936767414372164e3, 4.36261909014324716e3, 3.29079923573345963e3, 1.62138957456669019e3,
        5.37181101862009858e2, 1.17693950891312499e2, 1.57449261107098347e1, 1.0
    ]) -%}
    {%- set guarded = 'greatest(' ~ z ~ ', 1e0)' -%}
    {%- set w = '(1 / (' ~ guarded ~ ' * ' ~ guarded ~ '))' -%}
    {%- set far = '(0.5641895835477563e0 - ' ~ w ~ ' * ' ~ spellcurve._horner(w, [
        6.58749161529837803e-4, 1.60837851487422766e-2, 1.25781726111229246e-1, 3.60344899949804439e-1, 3.05326634961232344e-1,
        1.63153871373020978e-2
    ]) ~ ' / ' ~ spellcurve._horner(w, [
        2.33520497626869185e-3, 6.05183413124413191e-2, 5.27905102951428412e-1, 1.87295284992346725e0, 2.56852019228982242e0, 1.0
    ]) ~ ') / ' ~ guarded -%}
    {{ return(
        'case when ' ~ z ~ ' <= 0.46875e0 then exp(least(1e0, ' ~ square ~ ')) * (1 - ' ~ z ~ ' * ' ~ near ~ ')'
        ~ ' when ' ~ z ~ ' <= 4 then ' ~ middle ~ ' else ' ~ far ~ ' end'
    ) }}
{% endmacro %}


{# A polynomial as SQL, coefficients from the constant upwards. #}
{% macro _horner(x, coefficients) %}
    {%- set polynomial = namespace(sql='') -%}
    {%- for coefficient in coefficients | reverse -%}
        {%- set literal = spellcurve._double_literal(coefficient) -%}
        {%- set polynomial.sql = literal if loop.first else '(' ~ polynomial.sql ~ ' * ' ~ x ~ ' + ' ~ literal ~ ')' -%}
    {%- endfor -%}
    {{ return(polynomial.sql) }}
{% endmacro %}
