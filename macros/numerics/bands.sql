{#
    Simultaneous bands: intervals that hold for the whole curve between its first and its last event. They are the pointwise ones with
    another multiple of the standard error, `band_reach` (on the scale of std_error / survival).

    G is Greenwood's sum, n the number of spells, a = nG / (1 + nG). As n grows, (estimate / survival - 1) sqrt(n) / (1 + nG) tends to
    a Brownian bridge W at a (Gill 1983).
    - Hall and Wellner (1980): |W(a)| stays below k from 0 to the last a; the reach is k (1 + nG) / sqrt(n).
    - Equal precision (Nair 1984): |W(a)| / sqrt(a (1 - a)) stays below e from the first a to the last; the reach is e sqrt(G).
#}

{#
    The CTEs that end with `rows_with_reach`: the columns of the CTE `from_cte`, which has group_1, …, duration, events, censored,
    log_survival and greenwood_sum, and `band_reach`.
#}
{% macro _rows_with_reach(from_cte, simultaneous, confidence, groups, horizon) %}
    {%- set partition = spellcurve._partition_by(groups) | trim -%}
    {%- set in_range = 'not ' ~ spellcurve._is_nothing_left('log_survival') ~ (' and duration <= ' ~ horizon if horizon is not none else '') -%}
band_ranges as (
    select
        *,
        min(case when {{ in_range }} and greenwood_sum > 0 then greenwood_sum end) over ({{ partition }}) as first_variance,
        max(case when {{ in_range }} and greenwood_sum > 0 then greenwood_sum end) over ({{ partition }}) as last_variance,
        sum(events + censored) over ({{ partition }}) as spells_of_band
    from {{ from_cte }}
),

    {%- if simultaneous == 'hall-wellner' %}

band_angles as (
    select
        *,
        acos(greatest(-1, least(1,
            1.2732395447351628e0 * asin(sqrt(spells_of_band * last_variance / (1 + spells_of_band * last_variance))) - 1
        ))) as band_angle,
        sqrt(spells_of_band * last_variance / (1 + spells_of_band * last_variance)) as root_of_last
    from band_ranges
),

rows_with_reach as (
    select
        *,
        root_of_last * ({{ spellcurve._bridge_series('band_angle', confidence) }})
            * (1 + spells_of_band * greenwood_sum) / sqrt(spells_of_band) as band_reach
    from band_angles
)
    {%- else %}

band_angles as (
    select
        *,
        acos(greatest(-1, least(1,
            ln(1 + ln(last_variance / first_variance)) * {{ spellcurve._double_literal(2 / spellcurve._logarithm(101)) }} - 1
        ))) as band_angle
    from band_ranges
),

rows_with_reach as (
    select
        *,
        ({{ spellcurve._equal_precision_series('band_angle', confidence) }}) * sqrt(greenwood_sum) as band_reach
    from band_angles
)
    {%- endif %}
{%- endmacro %}


{#
    Critical values of the Brownian bridge from 0 to a, divided by sqrt(a), as a series of cosines in the angle of a, good to 1e-8: the
    critical value is found at 40 Chebyshev points of the angle while the model compiles. `angle` is arccos(4 / pi arcsin(sqrt(a)) - 1).
    (A search in SQL would name each step's figure many times in the next, and some warehouses compute it as often.)
#}
{% macro _bridge_series(angle, confidence) %}
    {%- set state = namespace(start=1.3) -%}
    {%- set points, figures = spellcurve._chebyshev_points(40), [] -%}
    {%- for point in points -%}
        {%- set root = spellcurve._cosine(1.57079632679489662 - 0.78539816339744831 * (point + 1)) -%}
        {%- set state.start = spellcurve._bridge_critical(root, confidence, state.start * root) / root -%}
        {%- do figures.append(state.start) -%}
    {%- endfor -%}
    {{ return(spellcurve._cosine_series(points, figures, angle)) }}
{% endmacro %}


{#
    Critical values of equal precision as a series of cosines, good to 1e-8: they solve (Nair 1984, after Miller and Siegmund 1982)
    density(x) (4 / x + (x - 1 / x) r) = 1 - confidence, r being the logarithm of Greenwood's sum at the last event over that at the
    first. `angle` is arccos(2 ln(1 + r) / ln(101) - 1): r stays below 100, for no sum is e^100 times another.
#}
{% macro _equal_precision_series(angle, confidence) %}
    {%- set z = spellcurve._normal_quantile(0.5 + confidence / 2) -%}
    {%- set goal = spellcurve._logarithm_in_few_steps(1 - confidence) + 0.91893853320467274 -%}
    {%- set points, figures = spellcurve._chebyshev_points(30), [] -%}
    {%- for point in points -%}
        {%- set r = 101 ** ((point + 1) / 2) - 1 -%}
        {%- set state = namespace(x=1 + (z * z + 4.7 * (point + 1)) ** 0.5) -%}
        {%- for step in range(8) -%}
            {%- set chance = 4 / state.x + (state.x - 1 / state.x) * r -%}
            {%- set slope = (r + (r - 4) / (state.x * state.x)) / chance - state.x -%}
            {%- set excess = spellcurve._logarithm_in_few_steps(chance) - state.x * state.x / 2 - goal -%}
            {%- set state.x = state.x - excess / slope -%}
        {%- endfor -%}
        {%- do figures.append(state.x) -%}
    {%- endfor -%}
    {{ return(spellcurve._cosine_series(points, figures, angle)) }}
{% endmacro %}


{% macro _chebyshev_points(count) %}
    {%- set points = [] -%}
    {%- for k in range(count) -%}
        {%- do points.append(spellcurve._cosine(3.14159265358979324 * (k + 0.5) / count)) -%}
    {%- endfor -%}
    {{ return(points) }}
{% endmacro %}


{# The polynomial through figures at Chebyshev points, as c_0 + c_1 cos(angle) + c_2 cos(2 angle) + … where the angle is a column. #}
{% macro _cosine_series(points, figures, angle) %}
    {%- set count = points | length -%}
    {%- set terms = [] -%}
    {%- set recurrence = namespace(before=[1.0] * count, now=points) -%}
    {%- for degree in range(count) -%}
        {%- set sum = namespace(value=0.0) -%}
        {%- set following = [] -%}
        {%- for k in range(count) -%}
            {%- set sum.value = sum.value + figures[k] * recurrence.before[k] -%}
            {%- do following.append(2 * points[k] * recurrence.now[k] - recurrence.before[k]) -%}
        {%- endfor -%}
        {%- set recurrence.before = recurrence.now -%}
        {%- set recurrence.now = following -%}
        {%- set coefficient = spellcurve._double_literal(sum.value * (1 if degree == 0 else 2) / count) -%}
        {%- do terms.append(coefficient if degree == 0 else '(' ~ coefficient ~ ') * cos(' ~ degree ~ ' * ' ~ angle ~ ')') -%}
    {%- endfor -%}
    {{ return(terms | join(' + ')) }}
{% endmacro %}


{# The k with P(|W(u)| < k for all u from 0 to a) = confidence; root: sqrt(a), below 1. Secant steps on the logarithm of the rest. #}
{% macro _bridge_critical(root, confidence, start) %}
    {%- set state = namespace(x=start * 0.99, rest=0.0, last_x=start, last_rest=spellcurve._bridge_crossing(root, start), step=1.0) -%}
    {%- set goal = spellcurve._logarithm_in_few_steps(1 - confidence) -%}
    {%- set state.last_rest = spellcurve._logarithm_in_few_steps(state.last_rest) - goal -%}
    {%- for iteration in range(30) if state.step > 1e-12 or 0 - state.step > 1e-12 -%}
        {%- set state.rest = spellcurve._logarithm_in_few_steps(spellcurve._bridge_crossing(root, state.x)) - goal -%}
        {%- set change = state.rest - state.last_rest -%}
        {%- set state.step = 0.0 if change == 0 else state.rest * (state.last_x - state.x) / (0 - change) -%}
        {%- set state.last_x = state.x -%}
        {%- set state.last_rest = state.rest -%}
        {%- set state.x = state.x - state.step -%}
    {%- endfor -%}
    {{ return(state.x) }}
{% endmacro %}


{#
    P(|W(u)| reaches x for some u from 0 to a), by reflection (Hall and Wellner 1980):
    1 - the sum over all whole k of (-1)^k exp(-2 k^2 x^2) P(|Z s + 2 k x (1 - a)| < x), with s^2 = a (1 - a).
#}
{% macro _bridge_crossing(root, x) %}
    {%- set left = 1 - root * root -%}
    {%- set scaled = x / (root * left ** 0.5) -%}
    {%- set state = namespace(crossing=2 * spellcurve._normal_tail_number(scaled), sign=1.0) -%}
    {%- for k in range(1, 7) -%}
        {%- set weight = 2.718281828459045 ** (-2 * k * k * x * x) -%}
        {%- if weight > 1e-18 -%}
            {%- set between = spellcurve._normal_tail_number(scaled * (2 * k * left - 1))
                - spellcurve._normal_tail_number(scaled * (2 * k * left + 1)) -%}
            {%- set state.crossing = state.crossing + 2 * state.sign * weight * between -%}
        {%- endif -%}
        {%- set state.sign = 0 - state.sign -%}
    {%- endfor -%}
    {{ return(state.crossing) }}
{% endmacro %}


{# P(Z > x) of the standard normal distribution, to about 1e-15, as a number while the model compiles. #}
{% macro _normal_tail_number(x) %}
    {%- set size = x if x > 0 else 0 - x -%}
    {%- if size > 9 -%}
        {{ return(0.0 if x > 0 else 1.0) }}
    {%- endif -%}
    {%- set density = 0.39894228040143267794 * 2.718281828459045 ** (0 - x * x / 2) -%}
    {%- if size > 4 -%}
        {%- set fraction = namespace(value=size) -%}
        {%- for k in range(40, 0, -1) -%}
            {%- set fraction.value = size + k / fraction.value -%}
        {%- endfor -%}
        {%- set tail = density / fraction.value -%}
    {%- else -%}
        {%- set sum = namespace(term=size, value=size) -%}
        {%- for k in range(1, 20 + (3 * size * size) | int) -%}
            {%- set sum.term = sum.term * size * size / (2 * k + 1) -%}
            {%- set sum.value = sum.value + sum.term -%}
        {%- endfor -%}
        {%- set tail = 0.5 - density * sum.value -%}
    {%- endif -%}
    {{ return(tail if x > 0 else 1 - tail) }}
{% endmacro %}


{# Cosine of an angle between minus and plus half a turn. #}
{% macro _cosine(angle) %}
    {%- set state = namespace(sum=1.0) -%}
    {%- for k in range(36, 0, -2) -%}
        {%- set state.sum = 1 - angle * angle / (k * (k - 1)) * state.sum -%}
    {%- endfor -%}
    {{ return(state.sum) }}
{% endmacro %}
