{#
    A generic test for a spell table built with source_rows=true: the rows of the sources are as many as the rows that its spells were
    built from and the rows that were refused. Give rows_per_spell='1' for a spell table with one spell a row and no such column.
#}
{% test every_row_accounted_for(model, sources, faulty, rows_per_spell='source_rows') %}
    {%- set relations = [sources] if sources is string or sources is not sequence else sources -%}
    {{ adapter.dispatch('_rows_unaccounted_for', 'spellcurve')(model, relations, faulty, rows_per_spell) }}
{% endtest %}


{% macro default___rows_unaccounted_for(model, relations, faulty, rows_per_spell) %}
with counts as (
    {%- for relation in relations %}
    select count(*) as given, 0 as in_spells, 0 as refused
    from {{ relation }}
    union all
    {%- endfor %}
    select 0 as given, coalesce(sum({{ spellcurve._integer(rows_per_spell) }}), 0) as in_spells, 0 as refused
    from {{ model }}
    union all
    select 0 as given, 0 as in_spells, count(*) as refused
    from {{ faulty }}
),

totals as (
    select
        {{ spellcurve._integer('sum(given)') }} as given,
        {{ spellcurve._integer('sum(in_spells)') }} as in_spells,
        {{ spellcurve._integer('sum(refused)') }} as refused
    from counts
)

select given, in_spells, refused, given - in_spells - refused as unaccounted_for
from totals
where given <> in_spells + refused
{% endmacro %}
