{#
    _eliminate (macros/numerics/sweep.sql) with arrays in place of a CTE for each group: the matrix becomes an array of its rows, and a
    fold over the groups takes them out. Spark resolves one level of CTEs at each pass over a query and gives up after a hundred.
#}
{% macro spark___eliminate(name, pivots, segments, carried) -%}
{%- set names = carried.split(', ') -%}
{{ name }}_arrays as (
    select
        {%- for column in names %}
        {{ column if column in segments else 'max(case when row_at = column_at then ' ~ column ~ ' end) as ' ~ column }},
        {%- endfor %}
        min(row_at) as row_at,
        max(row_at) as last_row,
        map_from_entries(collect_list(case when row_at >= 0 then struct(1000 * row_at + column_at, figure) end)) as cells
    from {{ name }}_0
    -- the cells of a segment together, and each row that stands aside by itself
    group by
        {%- for column in names %}
        {{ column if column in segments else 'case when row_at < 0 then ' ~ column ~ ' end' }}{{ ',' if not loop.last }}
        {%- endfor %}
),

{{ name }}_rows as (
    select
        {{ carried }}, row_at, last_row,
        transform(
            sequence(0, greatest(0, last_row)),
            i -> transform(sequence(0, greatest(0, last_row)), j -> coalesce(element_at(cells, 1000 * i + j), 0e0))
        ) as every_row
    from {{ name }}_arrays
),

{{ name }}_folded as (
    select
        {{ carried }}, row_at,
        aggregate(
            filter(sequence(0, greatest(0, last_row - 1)), s -> s > 0),
            named_struct('every_row', every_row, 'rank_so_far', 0),
            (so_far, s) -> transform(
                -- the pivot: the links of this group with those after it
                array(aggregate(slice(so_far.every_row[s], s + 2, last_row - s), 0e0, (links, link) -> links + link)),
                pivot -> case
                    when pivot > 0e0
                        then named_struct(
                            'every_row',
                            transform(
                                so_far.every_row,
                                one_row -> transform(
                                    one_row, (figure, j) -> figure + one_row[s] / pivot * so_far.every_row[s][j]
                                )
                            ),
                            'rank_so_far', so_far.rank_so_far + 1
                        )
                    else so_far
                end
            )[0]
        ) as folded
    from {{ name }}_rows
),

{{ name }}_eliminated as (
    select
        {{ carried }}, row_at,
        row_at as column_at,
        folded.every_row[0][0] as figure,
        folded.rank_so_far as rank_so_far
    from {{ name }}_folded
)
{%- endmacro %}

{# Databricks has these functions too, but here they could only be run on Spark: what is claimed of it rests on the other way. #}
{% macro databricks___eliminate(name, pivots, segments, carried) %}
    {{ return(spellcurve.default___eliminate(name, pivots, segments, carried)) }}
{% endmacro %}
