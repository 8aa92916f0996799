{% macro incidence_stacked(incidence, by=[], rest='still going') %}
    {%- do spellcurve._check_call(
        'incidence_stacked', {'incidence': incidence, 'rest': rest}, ['incidence', 'by', 'rest'], kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('incidence_stacked', 'spellcurve')(incidence, by, rest)) }}
{% endmacro %}


{% macro default__incidence_stacked(incidence, by, rest) %}
    {%- set caller_name = 'incidence_stacked' -%}
    {%- set taken = spellcurve._cumulative_incidence_columns() + ['part', 'share', 'share_from', 'share_to'] -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, taken) -%}
    {%- if rest is not string -%}
        {%- do spellcurve._fail(caller_name, 'rest is ' ~ spellcurve._shown(rest) ~ '; it must be a text.') -%}
    {%- endif -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set at_duration = spellcurve._partition_by(groups + ['duration']) -%}
    {%- set body -%}
with {{ spellcurve._incidence_rows(incidence, by) }},

rows_in_order as (
    select
        {{ each_group }}cause, duration, incidence,
        row_number() over ({{ at_duration }}order by cause) as place,
        sum(case when incidence is null then 1 else 0 end) over ({{ at_duration | trim }}) as unknown_parts,
        sum(incidence) over ({{ at_duration }}order by cause rows between unbounded preceding and current row) as sum_so_far,
        sum(incidence) over ({{ at_duration | trim }}) as sum_of_causes
    from incidence_rows
),

sides as (
    select 1 as side
    union all
    select 2 as side
),

-- those still going stand once a duration, above the last cause
parts as (
    select
        {{ each_group }}duration,
        case when side = 1 then cause else {{ spellcurve._text(rest) }} end as part,
        case when unknown_parts > 0 then null when side = 1 then incidence else greatest(0, 1 - sum_of_causes) end as share,
        case when unknown_parts > 0 then null when side = 1 then greatest(0, sum_so_far - incidence) else least(1, sum_of_causes) end
            as share_from,
        case when unknown_parts > 0 then null when side = 1 then least(1, sum_so_far) else 1 end as share_to
    from rows_in_order
    cross join sides
    where side = 1 or place = 1
)

select
    {{ spellcurve._aliases_as(groups, by) }}{{ spellcurve._integer('duration') }} as duration,
    part,
    {{ spellcurve._double('share') }} as share,
    {{ spellcurve._double('share_from') }} as share_from,
    {{ spellcurve._double('share_to') }} as share_to
from parts
    {%- endset -%}
    {{ return(spellcurve._provenance(caller_name, {'incidence': incidence}, {'by': by, 'rest': rest}) ~ '\n' ~ body) }}
{% endmacro %}
