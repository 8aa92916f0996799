{#
    Who is at risk in every group whenever anyone in its stratum has the event, and the weight that the moment gets: what each test
    of groups is made of. The spells are read once, by _risk_sets.
#}

{# Checks what the tests have in common, and gives the names that they work with. #}
{% macro _compared(caller_name, between, strata, by, taken) %}
    {%- do spellcurve._check_column(caller_name, 'between', between) -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, taken) -%}
    {%- set strata = spellcurve._check_columns(caller_name, 'strata', strata, []) -%}
    {%- set roles = {} -%}
    {%- for role, names in [('between', [between]), ('strata', strata), ('by', by)] -%}
        {%- for name in names -%}
            {%- set bare = spellcurve._bare(name) | lower -%}
            {%- if bare in roles -%}
                {%- do spellcurve._fail(
                    caller_name,
                    role ~ " names the column '" ~ name ~ "', which " ~ roles[bare] ~ ' names already; a column has one role.'
                ) -%}
            {%- endif -%}
            {%- do roles.update({bare: role}) -%}
        {%- endfor -%}
    {%- endfor -%}
    {%- set aliases = spellcurve._aliases(by + [between] + strata, 'group_') -%}
    {{ return({
        'by': by,
        'between': between,
        'strata': strata,
        'columns': by + [between] + strata,
        'segments': aliases[:by | length],
        'group': aliases[by | length],
        'strata_aliases': aliases[by | length + 1:],
        'each': spellcurve._each_then_comma(aliases[:by | length])
    }) }}
{% endmacro %}


{# 'log-rank', 'gehan', …, or 'fleming-harrington(p, q)' as a mapping of kind, p, q and the text that the result shows. #}
{% macro _check_weighting(caller_name, weighting) %}
    {%- set plain = ['log-rank', 'gehan', 'tarone-ware', 'peto', 'modified-peto'] -%}
    {%- if weighting is string and weighting in plain -%}
        {{ return({'kind': weighting, 'p': 0, 'q': 0, 'shown': weighting}) }}
    {%- endif -%}
    {%- set number = '([0-9]+(?:[.][0-9]+)?)' -%}
    {%- set pattern = '^fleming-harrington[(] *' ~ number ~ ' *, *' ~ number ~ ' *[)]$' -%}
    {%- set found = modules.re.match(pattern, weighting) if weighting is string else none -%}
    {%- if not found -%}
        {%- do spellcurve._fail(
            caller_name,
            'weighting is ' ~ spellcurve._shown(weighting) ~ "; it must be one of '" ~ plain | join("', '")
            ~ "', 'fleming-harrington(p, q)' with two numbers of at least 0."
        ) -%}
    {%- endif -%}
    {%- set p, q = found.group(1) | float, found.group(2) | float -%}
    {%- if p > 5 or q > 5 -%}
        {%- do spellcurve._fail(caller_name, "weighting is '" ~ weighting ~ "'; p and q must not be above 5.") -%}
    {%- endif -%}
    {%- set kind = 'log-rank' if p == 0 and q == 0 else 'fleming-harrington' -%}
    {{ return({'kind': kind, 'p': p, 'q': q, 'shown': 'fleming-harrington(' ~ found.group(1) ~ ', ' ~ found.group(2) ~ ')'}) }}
{% endmacro %}


{% macro _check_most_groups(caller_name, most_groups) %}
    {%- do spellcurve._check_whole(caller_name, 'most_groups', most_groups, 2) -%}
    {%- if most_groups > 50 -%}
        {%- do spellcurve._fail(caller_name, 'most_groups is ' ~ most_groups ~ '; it must not be above 50.') -%}
    {%- endif -%}
{% endmacro %}


{#
    The CTEs that end with `weighted_cells`: a row for each group (numbered 1, 2, … in the order of its values, null last) at each
    duration of a stratum at which anyone has the event, and at 0. Of more groups than `most_groups` there is group_count, and no event.
    Columns: the segments, stratum, duration, group_number, group_count, reference_number, group_label, at_risk, events,
    all_at_risk, all_events, all_weight.
    is_reference: a condition on the group's column, or none.
#}
{% macro _weighted_cells(spells, compared, weighting, most_groups, is_reference=none) -%}
{%- set each = compared.each -%}
{%- set group = compared.group -%}
{%- set segment = spellcurve._partition_by(compared.segments) -%}
{{ spellcurve._risk_sets(spells, compared.columns, none, 'fractional') }},

{{ spellcurve._whole_numbers('numbers', 'number', 1, most_groups) }},

numbered_risk_sets as (
    select
        {{ each }}{{ spellcurve._as_text(group) }} as group_label,
        dense_rank() over ({{ segment }}order by case when {{ group }} is null then 1 else 0 end, {{ group }}) as group_number,
        {%- if compared.strata_aliases %}
        dense_rank() over ({{ segment }}order by {{ compared.strata_aliases | join(', ') }}) as stratum,
        {%- else %}
        1 as stratum,
        {%- endif %}
        {%- if is_reference is not none %}
        case when {{ is_reference }} then 1 else 0 end as is_reference,
        {%- endif %}
        duration, at_risk, events,
        sum(events) over ({{ spellcurve._throughout(compared.segments + compared.strata_aliases + ['duration']) }}) as all_events
    from risk_sets
),

counted_risk_sets as (
    select
        {{ each }}group_label, group_number, stratum, duration, at_risk, events, all_events,
        {%- if is_reference is not none %}
        max(case when is_reference = 1 then group_number end) over ({{ spellcurve._throughout(compared.segments) }}) as reference_number,
        {%- endif %}
        max(group_number) over ({{ spellcurve._throughout(compared.segments) }}) as group_count
    from numbered_risk_sets
),

-- every group at every duration of its stratum, with its number at risk where it has a row of its own
cells as (
    select
        {{ each }}stratum, duration, number as group_number,
        max(group_count) as group_count,
        {{ 'max(reference_number)' if is_reference is not none else 'null' }} as reference_number,
        max(case when group_number = number then group_label end) as group_label,
        max(case when group_number = number then at_risk end) as own_at_risk,
        sum(case when group_number = number then events else 0 end) as events,
        max(case when group_count <= {{ most_groups }} then all_events else 0 end) as all_events
    from counted_risk_sets
    inner join numbers on number <= group_count
    group by {{ each }}stratum, duration, number
),

-- between two of its own rows a group keeps the number at risk of the later one
cells_with_steps_to_come as (
    select
        *,
        count(own_at_risk) over (
            {{ spellcurve._partition_by(compared.segments + ['stratum', 'group_number']) -}}
            order by duration desc rows between unbounded preceding and current row
        ) as steps_to_come
    from cells
),

full_cells as (
    select
        {{ each }}stratum, duration, group_number, group_count, reference_number, events, all_events,
        max(group_label) over ({{ spellcurve._throughout(compared.segments + ['group_number']) }}) as group_label,
        coalesce(max(own_at_risk) over (
            {{ spellcurve._throughout(compared.segments + ['stratum', 'group_number', 'steps_to_come']) }}
        ), 0) as at_risk
    from cells_with_steps_to_come
),

cells_at_events as (
    select
        {{ each }}stratum, duration, group_number, group_count, reference_number, group_label, at_risk, events, all_events,
        sum(at_risk) over ({{ spellcurve._throughout(compared.segments + ['stratum', 'duration']) }}) as all_at_risk
    from full_cells
    where all_events > 0 or duration = 0
),

{{ spellcurve._weighted('cells_at_events', 'weighted_cells', 'all', weighting, compared.segments + ['stratum', 'group_number']) }}
{%- endmacro %}


{#
    The CTE `<name>`: the rows of a CTE with <prefix>_weight, from its columns <prefix>_at_risk and <prefix>_events. `partition`: what
    separates one course of durations from another. A weight below exp(-150) of the largest is as good as none; it stops there.
#}
{% macro _weighted(cte, name, prefix, weighting, partition) -%}
{%- set at_risk, events = prefix ~ '_at_risk', prefix ~ '_events' -%}
{%- if weighting.kind in ('log-rank', 'gehan', 'tarone-ware') -%}
{{ name }} as (
    select
        *,
        {{ {'log-rank': '1e0', 'gehan': at_risk, 'tarone-ware': 'sqrt(' ~ at_risk ~ ')'}[weighting.kind] }} as {{ prefix }}_weight
    from {{ cte }}
)
{%- else -%}
{%- set peto = weighting.kind != 'fleming-harrington' -%}
{%- set course = spellcurve._partition_by(partition) ~ 'order by duration rows between unbounded preceding and ' -%}
{%- set upto = course ~ ('current row' if peto else '1 preceding') -%}
{%- set of_risk = '(' ~ at_risk ~ ' + 1)' if peto else at_risk -%}
{{ name }}_shares as (
    select
        *,
        case when {{ events }} > 0 then {{ events }} / (2 * {{ of_risk }} - {{ events }}) else 0 end as {{ prefix }}_thin
    from {{ cte }}
),

{{ name }}_steps as (
    select
        *,
        case
            when {{ events }} <= 0 then 0
            {%- if not peto %}
            when {{ events }} >= {{ at_risk }} * (1 - 1e-12) then {{ spellcurve._log_of_nothing_left() }}
            {%- endif %}
            else {{ spellcurve._log_of_share_left(events, of_risk, prefix ~ '_thin') }}
        end as {{ prefix }}_step
    from {{ name }}_shares
),

{{ name }}_logs as (
    select
        *,
        coalesce(sum({{ prefix }}_step) over ({{ upto }}), 0) as {{ prefix }}_log
    from {{ name }}_steps
),

{% if weighting.q > 0 -%}
{{ name }}_gone as (
    select
        *,
        case
            when {{ spellcurve._is_nothing_left(prefix ~ '_log') }} then 1
            when {{ prefix }}_log < -0.01e0 then 1 - {{ spellcurve._exp(prefix ~ '_log') }}
            else 0 - {{ spellcurve._horner(prefix ~ '_log', [1, 0.5, 1 / 6, 1 / 24, 1 / 120, 1 / 720]) }} * {{ prefix }}_log
        end as {{ prefix }}_gone
    from {{ name }}_logs
),

{% endif -%}
{{ name }} as (
    select
        *,
        {%- if weighting.kind == 'peto' %}
        exp(greatest(-150, {{ prefix }}_log)) as {{ prefix }}_weight
        {%- elif weighting.kind == 'modified-peto' %}
        exp(greatest(-150, {{ prefix }}_log)) * {{ at_risk }} / ({{ at_risk }} + 1) as {{ prefix }}_weight
        {%- else %}
        {%- set powers = [] %}
        {%- if weighting.p > 0 %}
        {%- do powers.append(spellcurve._double_literal(weighting.p) ~ ' * ' ~ prefix ~ '_log') %}
        {%- endif %}
        {%- if weighting.q > 0 %}
        {%- do powers.append(
            spellcurve._double_literal(weighting.q) ~ ' * ln(case when ' ~ prefix ~ '_gone > 0 then ' ~ prefix ~ '_gone else 1 end)'
        ) %}
        {%- endif %}
        case
            {%- if weighting.p > 0 %}
            when {{ spellcurve._is_nothing_left(prefix ~ '_log') }} then 0
            {%- endif %}
            {%- if weighting.q > 0 %}
            when {{ prefix }}_gone <= 0 then 0
            {%- endif %}
            else exp(greatest(-150, {{ powers | join(' + ') }}))
        end as {{ prefix }}_weight
        {%- endif %}
    from {{ name }}_{{ 'gone' if weighting.q > 0 else 'logs' }}
)
{%- endif -%}
{%- endmacro %}


{#
    The share of the variance that ties leave: (n - d) / (n - 1), for d events among n; 1 where there is no tie. Where all but a rounding
    error have the event, all have it: a variance of nothing must be 0.
#}
{% macro _tie_share(events, at_risk) %}
    {{ return(
        'case when ' ~ events ~ ' <= 1 then 1 when ' ~ events ~ ' >= ' ~ at_risk ~ ' * (1 - 1e-12) then 0 else (' ~ at_risk ~ ' - ' ~ events
        ~ ') / (' ~ at_risk ~ ' - 1) end'
    ) }}
{% endmacro %}
