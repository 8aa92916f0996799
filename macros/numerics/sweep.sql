{#
    Gaussian elimination in long form, for a covariance whose rows sum to nothing, as that of the scores of all groups does.

    <name>_0 holds row_at, column_at, figure, rank_so_far: for rows and columns from 1 the covariances off the diagonal with their signs
    turned (so that none is negative), in row 0 and column 0 the scores, at (0, 0) nothing. The CTEs <name>_1, <name>_2, … each
    take one row and column out, and <name>_eliminated is the last. A pivot, the variance left to a group when the groups before it
    are known, is the sum of its links with the groups still there: so neither pivots nor links ever come from a subtraction, which
    keeps their digits, and a pivot of nothing is exactly 0 (Grassmann, Taksar and Heyman 1985, who do so for Markov chains). It is
    passed over: what remains is a generalised inverse. At the end (0, 0) holds the quadratic form of the scores, and rank_so_far the rank.
    Each CTE reads the one before once: row, column and pivot come by windows over the same rows. Rows at (-1, -1) stay as they are.
    Windows and numbers need nothing made up for them (see _throughout): an engine may go over each CTE three times otherwise.
    Where an engine gives up on that many CTEs, macros/dialect/elimination.sql has another way.
#}
{% macro _eliminate(name, pivots, segments, carried) %}
    {{ return(adapter.dispatch('_eliminate', 'spellcurve')(name, pivots, segments, carried)) }}
{% endmacro %}


{% macro default___eliminate(name, pivots, segments, carried) -%}
{%- set by_row = spellcurve._throughout(segments + ['row_at']) -%}
{%- set by_column = spellcurve._throughout(segments + ['column_at']) -%}
{%- set everywhere = spellcurve._throughout(segments) -%}
{%- for s in range(1, pivots + 1) -%}
{{ name }}_{{ s if s < pivots else 'eliminated' }} as (
    select
        {{ carried }}, row_at, column_at,
        {%- set pivot = 'sum(case when row_at = ' ~ s ~ ' and column_at > ' ~ s ~ ' then figure end) over (' ~ everywhere ~ ')' %}
        figure + coalesce(
            max(case when column_at = {{ s }} then figure end) over ({{ by_row }})
            / case when {{ pivot }} > 0e0 then {{ pivot }} end
            * max(case when row_at = {{ s }} then figure end) over ({{ by_column }}), 0e0
        ) as figure,
        rank_so_far + case when {{ pivot }} > 0e0 then 1 else 0 end as rank_so_far
    from {{ name }}_{{ s - 1 }}
    {%- if s > 1 %}
    where row_at <> {{ s - 1 }} and column_at <> {{ s - 1 }}
    {%- endif %}
)
{%- if s < pivots %},

{% endif -%}
{%- endfor -%}
{%- endmacro %}
