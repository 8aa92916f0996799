{#
    What `causes` may be: none for every cause in the spells, one cause or a list of causes to show, or a mapping from causes to labels that
    shows (and merges) those. Returned as none or a list of [cause, label].
#}
{% macro _cause_labels(caller_name, causes) %}
    {%- if causes is none -%}
        {{ return(none) }}
    {%- endif -%}
    {%- set given = causes if causes is mapping else {} -%}
    {%- if causes is not mapping -%}
        {%- for cause in spellcurve._check_values(caller_name, 'causes', causes) -%}
            {%- do given.update({cause: cause}) -%}
        {%- endfor -%}
    {%- endif -%}
    {%- set labels = [] -%}
    {%- for cause, label in given.items() -%}
        {%- if cause is not string or label is not string -%}
            {%- do spellcurve._fail(
                caller_name, 'causes names ' ~ spellcurve._shown(label if cause is string else cause) ~ '; causes and labels are texts.'
            ) -%}
        {%- endif -%}
        {%- do labels.append([cause, label]) -%}
    {%- endfor -%}
    {%- if labels | length == 0 -%}
        {%- do spellcurve._fail(
            caller_name, 'causes is empty; it must be a cause, a list of causes, or a mapping of cause to label.'
        ) -%}
    {%- endif -%}
    {{ return(labels) }}
{% endmacro %}


{#
    As _risk_sets, with the causes told apart: the CTEs that end with `cause_risk_sets` (group_1, …, cause_number, cause, duration, is_step,
    at_risk, events of the cause, all_events), one row a group, cause and duration.

    labels: what _cause_labels gave. Without labels, every cause that an event at risk has anywhere in the table stands in every group;
    an event without a cause is of cause 'unknown'. The grid of causes and durations is unrolled from the
    aggregate without a second reading of it.
#}
{% macro _cause_risk_sets(spells, by, horizon, weights, labels) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set cause_of_event = 'coalesce(' ~ spellcurve._as_text('cause') ~ ", 'unknown')" -%}
    {%- set counts = 'event = 1 and (entry < duration or entry = 0)' -%}
    {%- set own_cause -%}
        {%- if labels is none -%}
case when {{ counts }} then {{ cause_of_event }} end
        {%- else -%}
case
            {%- for cause, label in labels %}
            when {{ counts }} and {{ cause_of_event }} = {{ spellcurve._text(cause) }} then {{ spellcurve._text(label) }}
            {%- endfor %}
        end
        {%- endif -%}
    {%- endset -%}
    {%- set shown = [] -%}
    {%- for cause, label in labels or [] if label not in shown -%}{%- do shown.append(label) -%}{%- endfor -%}
{{ spellcurve._changes(spells, by, horizon, own_cause) }},

{% set at_duration = spellcurve._partition_by(groups + ['duration']) -%}
{%- set from_the_end = partition ~ 'order by duration desc range between unbounded preceding and current row' -%}
{%- set null_first = 'case when own_cause is null then 0 else 1 end, own_cause' -%}
-- a duration has one row for each cause seen at it, and one without a cause that comes first
changes_with_totals as (
    select
        {{ each_group }}duration, own_cause, events,
        sum(leaving - entered) over ({{ from_the_end }}) as net_leaving,
        sum(leaving + entered) over ({{ partition | trim }}) as all_turns,
        sum(events) over ({{ at_duration | trim }}) as all_events,
        max(is_step) over ({{ at_duration | trim }}) as is_step,
        row_number() over ({{ at_duration }}order by {{ null_first }}) as place,
        {%- if labels is none %}
        dense_rank() over (order by {{ null_first }}) - 1 as own_number
        {%- else %}
        case own_cause
            {%- for label in shown %}
            when {{ spellcurve._text(label) }} then {{ loop.index }}
            {%- endfor %}
            else 0
        end as own_number
        {%- endif %}
    from changes
),

changes_numbered as (
    select
        {{ each_group }}duration, own_cause, own_number, events, all_events, is_step, place,
        {% if weights == 'whole' -%}
        net_leaving as at_risk,
        {%- else -%}
        case when net_leaving > 1e-12 * all_turns then net_leaving else 0 end as at_risk,
        {%- endif %}
        {{ 'max(own_number) over ()' if labels is none else shown | length }} as causes
    from changes_with_totals
),

{{ spellcurve._repeated_rows('cells', 'changes_numbered', 'case when place = 1 then causes else 1 end', 4) }},

cells_named as (
    select
        {{ each_group }}duration, own_cause, own_number, events, all_events, is_step, at_risk,
        case when place = 1 then {{ spellcurve._integer('units_on + 1') }} else {{ spellcurve._integer('own_number') }} end as cause_number
    from cells
),

cause_cells as (
    select
        {{ each_group }}cause_number, duration,
        max(is_step) as is_step,
        max(at_risk) as at_risk,
        sum(case when cause_number = own_number then events else 0 end) as events,
        max(all_events) as all_events,
        max(case when cause_number = own_number then own_cause end) as own_cause
    from cells_named
    group by {{ each_group }}cause_number, duration
),

cause_risk_sets as (
    select
        {{ each_group }}cause_number,
        {% if labels is none -%}
        max(own_cause) over (partition by cause_number) as cause,
        {%- else -%}
        case cause_number
            {%- for label in shown %}
            when {{ loop.index }} then {{ spellcurve._text(label) }}
            {%- endfor %}
        end as cause,
        {%- endif %}
        duration, is_step, at_risk, events, all_events
    from cause_cells
)
{%- endmacro %}
