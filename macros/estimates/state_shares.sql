{% macro state_shares(
    relation, subject, effective, status, states, origin=none, sequence=none, by=[], as_of=none, observe_from=none, recorded_at=none,
    unit='day', horizon=none, grid='steps', minimum_at_risk=0, small_counts='keep', rows='sound', most_durations=4096
) %}
    {%- do spellcurve._check_call(
        'state_shares',
        {'relation': relation, 'subject': subject, 'effective': effective, 'status': status, 'states': states},
        ['relation', 'subject', 'effective', 'status', 'states', 'origin', 'sequence', 'by', 'as_of', 'observe_from', 'recorded_at',
         'unit', 'horizon', 'grid', 'minimum_at_risk', 'small_counts', 'rows', 'most_durations'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('state_shares', 'spellcurve')(
        relation, subject, effective, status, states, origin, sequence, by, as_of, observe_from, recorded_at, unit, horizon, grid,
        minimum_at_risk, small_counts, rows, most_durations
    )) }}
{% endmacro %}


{% macro _state_shares_columns() %}
    {{ return([
        'state', 'duration', 'at_risk', 'arrivals', 'departures', 'share', 'subject_id', 'given_time', 'given_status', 'fault', 'detail'
    ]) }}
{% endmacro %}


{% macro default__state_shares(
    relation, subject, effective, status, states, origin, sequence, by, as_of, observe_from, recorded_at, unit, horizon, grid,
    minimum_at_risk, small_counts, rows, most_durations
) %}
    {%- set caller_name = 'state_shares' -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, spellcurve._state_shares_columns()) -%}
    {%- set o = spellcurve._observation(caller_name, as_of, observe_from, recorded_at, unit, [], rows, false) -%}
    {%- for argument, name in {
        'subject': subject, 'effective': effective, 'status': status, 'origin': origin or subject, 'sequence': sequence or subject
    }.items() -%}
        {%- do spellcurve._check_column(caller_name, argument, name) -%}
    {%- endfor -%}
    {%- do spellcurve._check_rows_wanted(caller_name, grid, horizon, minimum_at_risk, small_counts) -%}
    {%- do spellcurve._check_whole(caller_name, 'most_durations', most_durations, 1) -%}
    {%- set states = spellcurve._check_states(caller_name, states) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set provenance = spellcurve._provenance(caller_name, {'relation': relation}, {
        'subject': subject, 'effective': effective, 'status': status, 'states': states, 'origin': origin, 'sequence': sequence, 'by': by,
        'as_of': o.as_of, 'observe_from': o.observe_from, 'recorded_at': recorded_at, 'unit': unit, 'horizon': horizon, 'grid': grid,
        'minimum_at_risk': minimum_at_risk, 'small_counts': small_counts, 'rows': rows, 'most_durations': most_durations
    }) -%}
    {%- set ctes = spellcurve._state_rows(relation, subject, effective, status, states, origin, sequence, by, o) -%}

    {%- if rows == 'faulty' -%}
        {%- set body -%}
with {{ ctes }}

select
    subject_id,
    {{ spellcurve._as_text('raw_time') }} as given_time,
    status as given_status,
    fault,
    detail
from rows_agreed
where fault is not null
        {%- endset -%}
        {{ return(provenance ~ '\n' ~ body) }}
    {%- endif -%}

    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set durations_at_most = most_durations if horizon is none or horizon + 1 > most_durations else horizon + 1 -%}
    {%- set counts = ['at_risk', 'arrivals', 'departures'] -%}
    {%- set body -%}
with {{ ctes }},

{{ spellcurve._state_pieces(sequence, groups, o) }},

{{ spellcurve._state_moves(states | length, groups) }},

{{ spellcurve._state_products(states | length, groups, durations_at_most) }},

states as (
    {%- for state in states %}
    select {{ loop.index }} as state_number
    {%- if not loop.last %}
    union all
    {%- endif %}
    {%- endfor %}
),

{% set numbers = range(1, (states | length) + 1) -%}
rows_of_states as (
    select
        {{ each_group }}state_number, duration, is_step, all_at_risk, next_duration, next_all_at_risk,
        {%- for name in ['at_risk', 'next_at_risk', 'arrivals', 'departures', 'share'] %}
        case state_number{% for s in numbers %} when {{ s }} then {{ name }}_{{ s }}{% endfor %} end as {{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from state_figures
    cross join states
),

{% if grid == 'steps' -%}
rows_wanted as (
    select
        {{ each_group }}state_number, duration, {{ counts | join(', ') }}, share, all_at_risk
    from rows_of_states
    where is_step = 1{% if horizon is not none %} and duration <= {{ horizon }}{% endif %}
)
{%- else -%}
{{ spellcurve._repeated_rows('units', 'rows_of_states', 'coalesce(next_duration, duration + 1) - duration') }},

rows_wanted as (
    select
        {{ each_group }}state_number,
        duration + units_on as duration,
        case when units_on = 0 then at_risk else next_at_risk end as at_risk,
        case when units_on = 0 then arrivals else 0 end as arrivals,
        case when units_on = 0 then departures else 0 end as departures,
        share,
        case when units_on = 0 then all_at_risk else next_all_at_risk end as all_at_risk
    from units
    {%- if horizon is not none %}
    where duration + units_on <= {{ horizon }}
    {%- endif %}
)
{%- endif %}

select
    {{ spellcurve._aliases_as(groups, by) -}}
    case state_number
        {%- for state in states %}
        when {{ loop.index }} then {{ spellcurve._text(state) }}
        {%- endfor %}
    end as state,
    {{ spellcurve._integer('duration') }} as duration,
    {{ spellcurve._published_columns(counts, ['share'], minimum_at_risk, small_counts, 'whole', 'all_at_risk') }}
from rows_wanted
    {%- endset -%}
    {{ return(provenance ~ '\n' ~ body) }}
{% endmacro %}


{% macro _check_states(caller_name, states) %}
    {%- set names = spellcurve._check_values(caller_name, 'states', states) -%}
    {%- for name in names -%}
        {%- if name is not string -%}
            {%- do spellcurve._fail(caller_name, 'states names ' ~ spellcurve._shown(name) ~ '; states are texts.') -%}
        {%- elif name in names[:loop.index0] -%}
            {%- do spellcurve._fail(caller_name, "states names '" ~ name ~ "' twice; name it once.") -%}
        {%- endif -%}
    {%- endfor -%}
    {%- if names | length < 2 or names | length > 20 -%}
        {%- do spellcurve._fail(caller_name, 'states has ' ~ names | length ~ ' states; it must have between 2 and 20.') -%}
    {%- endif -%}
    {{ return(names) }}
{% endmacro %}


{# The CTEs that end with `rows_agreed`: the rows of the history as numbers of states at moments, each with its fault if it has one. #}
{% macro _state_rows(relation, subject, effective, status, states, origin, sequence, by, o) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set apart = spellcurve._apart_from_refused(o) -%}
    {%- set in_order = 'moment' ~ (', sequence_value' if sequence else '') -%}
    {%- set faults = spellcurve._recording_faults(o) + [
        ['no_subject', 'subject_id is null', spellcurve._text(subject ~ ' is null')]
    ] + ([] if origin is none else [
        ['no_origin', 'raw_origin is null', spellcurve._text(origin ~ ' is null')],
        ['unreadable_origin', 'origin is null', spellcurve._detail(origin, 'raw_origin', 'is not a date or a time')]
    ]) + [
        ['no_time', 'raw_time is null', spellcurve._text(effective ~ ' is null')],
        ['unreadable_time', 'moment is null', spellcurve._detail(effective, 'raw_time', 'is not a date or a time')],
        ['after_as_of', 'moment > ' ~ o.as_of_sql, spellcurve._detail(effective, 'raw_time', 'is after as_of ' ~ o.as_of)]
    ] + ([] if origin is none else [
        ['before_origin', spellcurve._is_before('moment', 'origin', o), spellcurve._detail(effective, 'raw_time', 'is before ' ~ origin)]
    ]) + [
        ['no_status', 'status is null', spellcurve._text(status ~ ' is null')],
        ['unknown_status', 'state_number is null', spellcurve._detail(status, 'status', 'is not among states')]
    ] -%}
source_rows_read as (
    select
        {{- spellcurve._recorded_columns(o) }}
        {{ spellcurve._columns_as(by, groups) }}{{ spellcurve._column(subject) }} as subject_id,
        {{ spellcurve._column(effective) }} as raw_time,
        {{ spellcurve._read_moment(spellcurve._column(effective)) }} as moment,
        {%- if origin is not none %}
        {{ spellcurve._column(origin) }} as raw_origin,
        {{ spellcurve._read_moment(spellcurve._column(origin)) }} as origin,
        {%- endif %}
        {%- if sequence %}
        {{ spellcurve._column(sequence) }} as sequence_value,
        {%- endif %}
        {{ spellcurve._as_text(spellcurve._column(status)) }} as status
    from {{ relation }}
),

rows_numbered as (
    select
        *,
        case status
            {%- for state in states %}
            when {{ spellcurve._text(state) }} then {{ loop.index }}
            {%- endfor %}
        end as state_number
    from source_rows_read
),

rows_judged as (
    select
        {{ spellcurve._each_then_comma(groups) }}subject_id, {{ in_order }}, state_number, status
        {%- if origin is not none %}, origin{% endif %}
        {%- if o.rows == 'faulty' %}, raw_time{% endif %},
        {{ spellcurve._first_fault(faults, o) | indent(8) }}
    from rows_numbered
),

moments_compared as (
    select
        *,
        min(state_number) over (partition by subject_id{{ apart }}, {{ in_order }}) as lowest_state,
        max(state_number) over (partition by subject_id{{ apart }}, {{ in_order }}) as highest_state
    from rows_judged
    {{ spellcurve._without_refused(o) }}
),

rows_agreed as (
    select
        {{ spellcurve._each_then_comma(groups) }}subject_id, {{ in_order }}, state_number, status,
        {{ 'moment' if origin is none else 'origin' }} as origin
        {%- if o.rows == 'faulty' %}, raw_time{% endif %},
        {{ spellcurve._first_fault([[
            'conflicting_status', 'lowest_state <> highest_state',
            spellcurve._detail(effective, 'raw_time', 'has several statuses of this subject; a sequence column would tell their order')
        ]], o, so_far=true) | indent(8) }}
    from moments_compared
)
{%- endmacro %}


{#
    From `rows_agreed` to `pieces`: the stays of subjects in a state, under observation from after `begins` to `ends`, each with the state that
    followed (0: none known). Of several changes within one unit the last counts. is_initial: seen in the state at tenure 0.
#}
{% macro _state_pieces(sequence, groups, o) %}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set in_order = 'moment' ~ (', sequence_value' if sequence else '') -%}
    {%- set last_first = 'moment desc' ~ (', sequence_value desc' if sequence else '') -%}
rows_with_origin as (
    select
        subject_id, {{ in_order }}, state_number,
        {%- for group in groups %}
        first_value({{ group }}) over (
            partition by subject_id order by {{ in_order }} rows between unbounded preceding and current row
        ) as {{ group }},
        {%- endfor %}
        min(origin) over (partition by subject_id) as origin
    from rows_agreed
    where fault is null
),

rows_with_tenure as (
    select
        {{ each_group }}subject_id, {{ in_order }}, state_number,
        {{ spellcurve._completed_units('origin', 'moment', o.unit) }} as tenure,
        {{ spellcurve._completed_units('origin', o.as_of_sql, o.unit) }} as last_tenure,
        {%- if o.observe_from is none %}
        {{ spellcurve._integer('0') }} as entry
        {%- else %}
        {%- set observe_from = spellcurve._moment_literal(o.observe_from) %}
        case
            when origin < {{ observe_from }} then {{ spellcurve._completed_units('origin', observe_from, o.unit) }}
            else {{ spellcurve._integer('0') }}
        end as entry
        {%- endif %}
    from rows_with_origin
),

rows_placed as (
    select
        {{ each_group }}subject_id, state_number, tenure, last_tenure, entry,
        row_number() over (partition by subject_id, tenure order by {{ last_first }}, state_number) as place_from_last
    from rows_with_tenure
),

states_by_tenure as (
    select
        {{ each_group }}subject_id, state_number, tenure, last_tenure, entry,
        min(tenure) over (partition by subject_id) as first_tenure,
        lead(tenure) over (partition by subject_id order by tenure) as next_tenure,
        lead(state_number) over (partition by subject_id order by tenure) as next_state
    from rows_placed
    where place_from_last = 1
),

stays as (
    select
        {{ each_group }}state_number,
        greatest(tenure, entry) as begins,
        coalesce(next_tenure, last_tenure) as ends,
        coalesce(next_state, 0) as next_state,
        case when greatest(first_tenure, entry) = 0 and tenure = 0 then 1 else 0 end as is_initial
    from states_by_tenure
),

pieces as (
    select
        {{ each_group }}state_number, begins, ends, next_state, is_initial,
        count(*) as subjects
    from stays
    group by {{ each_group }}state_number, begins, ends, next_state, is_initial
)
{%- endmacro %}


{#
    From `pieces` to `state_changes`: one row a group and duration, wide over states: at_risk_s just before, arrivals_s, departures_s, initial_s,
    and the matrix p_g_h of moves at the duration, the identity where nobody of a state is at risk.
#}
{% macro _state_moves(states, groups) %}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set numbers = range(1, states + 1) -%}
{{ spellcurve._whole_numbers('sides', 'side', 1, 3) }},

-- each stay as it ends (1), as it begins later than at 0 (2), and at 0 (3)
turns as (
    select
        {{ each_group }}state_number, next_state, is_initial, side,
        {{ spellcurve._double('subjects') }} as subjects,
        case side when 1 then ends when 2 then begins else 0 end as duration
    from pieces
    cross join sides
    where
        side = 3
        or (side = 1 and (ends > begins or (is_initial = 1 and ends = 0)))
        or (side = 2 and ends > begins and is_initial = 0)
),

changes as (
    select
        {{ each_group }}duration,
        max(case when side = 2 then 0 else 1 end) as is_step,
        {%- for s in numbers %}
        sum(case when side = 1 and state_number = {{ s }} then subjects else 0 end) as leaving_{{ s }},
        sum(case when side = 2 and state_number = {{ s }} then subjects else 0 end) as joining_{{ s }},
        sum(case when side = 3 and state_number = {{ s }} and is_initial = 1 then subjects else 0 end) as initial_{{ s }},
        {%- for t in numbers if t != s %}
        sum(case when side = 1 and state_number = {{ s }} and next_state = {{ t }} then subjects else 0 end) as moves_{{ s }}_{{ t }},
        {%- endfor %}
        {%- endfor %}
        sum(case when side = 3 then is_initial * subjects else 0 end) as all_initial
    from turns
    group by {{ each_group }}duration
),

risk_sets as (
    select
        {{ each_group }}duration, is_step,
        {%- for s in numbers %}
        sum(leaving_{{ s }} - joining_{{ s }}) over (
            {{ partition }}order by duration desc rows between unbounded preceding and current row
        ) as at_risk_{{ s }},
        sum(initial_{{ s }}) over ({{ partition | trim }}) as initial_{{ s }},
        {%- for t in numbers if t != s %}
        moves_{{ s }}_{{ t }},
        {%- endfor %}
        {%- set away, hither = [], [] %}
        {%- for t in numbers if t != s %}
        {%- do away.append('moves_' ~ s ~ '_' ~ t) %}
        {%- do hither.append('moves_' ~ t ~ '_' ~ s) %}
        {%- endfor %}
        {{ away | join(' + ') }} as departures_{{ s }},
        {{ hither | join(' + ') }} as arrivals_{{ s }},
        {%- endfor %}
        sum(all_initial) over ({{ partition | trim }}) as all_initial
    from changes
),

state_changes as (
    select
        {{ each_group }}duration, is_step, all_initial,
        {%- for s in numbers %}
        at_risk_{{ s }}, arrivals_{{ s }}, departures_{{ s }}, initial_{{ s }},
        {%- for t in numbers %}
        {%- if s == t %}
        case when at_risk_{{ s }} > 0 then (at_risk_{{ s }} - departures_{{ s }}) / at_risk_{{ s }} else 1 end as p_{{ s }}_{{ t }},
        {%- else %}
        case when at_risk_{{ s }} > 0 then moves_{{ s }}_{{ t }} / at_risk_{{ s }} else 0 end as p_{{ s }}_{{ t }},
        {%- endif %}
        {%- endfor %}
        {%- endfor %}
        row_number() over ({{ partition }}order by duration) as place
    from risk_sets
)
{%- endmacro %}


{#
    From `state_changes` to `state_figures`. The products of all matrices up to each duration are made by doubling: after step k a row holds
    the product of the last 2^k matrices, and takes the one 2^k rows before it on its left (Hillis and Steele 1986). No recursion; each CTE
    reads the one before it once.
#}
{% macro _state_products(states, groups, durations_at_most) %}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set numbers = range(1, states + 1) -%}
    {%- set cells, kept = [], ['is_step', 'all_initial', 'place'] -%}
    {%- for s in numbers -%}
        {%- for name in ['at_risk', 'arrivals', 'departures', 'initial'] -%}{%- do kept.append(name ~ '_' ~ s) -%}{%- endfor -%}
        {%- for t in numbers -%}{%- do cells.append('p_' ~ s ~ '_' ~ t) -%}{%- endfor -%}
    {%- endfor -%}
    {%- set doubling = namespace(reach=1, source='state_changes') -%}
    {%- for step in range(1, 25) if doubling.reach < durations_at_most %}
earlier_{{ step }} as (
    select
        {{ each_group }}duration, {{ kept | join(', ') }}, {{ cells | join(', ') }},
        {%- for cell in cells %}
        lag({{ cell }}, {{ doubling.reach }}) over ({{ partition }}order by duration) as earlier_{{ cell }}{{ ',' if not loop.last }}
        {%- endfor %}
    from {{ doubling.source }}
),

products_{{ step }} as (
    select
        {{ each_group }}duration, {{ kept | join(', ') }},
        {%- for s in numbers %}
        {%- for t in numbers %}
        {%- set terms = [] %}
        {%- for u in numbers %}
        {%- do terms.append('earlier_p_' ~ s ~ '_' ~ u ~ ' * p_' ~ u ~ '_' ~ t) %}
        {%- endfor %}
        case when place > {{ doubling.reach }} then {{ terms | join(' + ') }} else p_{{ s }}_{{ t }} end as p_{{ s }}_{{ t }}
        {{- ',' if s != states or t != states }}
        {%- endfor %}
        {%- endfor %}
    from earlier_{{ step }}
),
{# a blank line between CTEs #}
        {%- set doubling.reach = doubling.reach * 2 -%}
        {%- set doubling.source = 'products_' ~ step %}
    {%- endfor %}

state_figures as (
    select
        {{ each_group }}duration, is_step,
        {%- set together = [] %}
        {%- for s in numbers %}
        {%- do together.append('at_risk_' ~ s) %}
        at_risk_{{ s }}, arrivals_{{ s }}, departures_{{ s }},
        lead(at_risk_{{ s }}) over ({{ partition }}order by duration) as next_at_risk_{{ s }},
        {%- set terms = [] %}
        {%- for u in numbers %}
        {%- do terms.append('initial_' ~ u ~ ' * p_' ~ u ~ '_' ~ s) %}
        {%- endfor %}
        case
            when all_initial > 0 and place <= {{ doubling.reach }} then ({{ terms | join(' + ') }}) / all_initial
        end as share_{{ s }},
        {%- endfor %}
        {{ together | join(' + ') }} as all_at_risk,
        lead({{ together | join(' + ') }}) over ({{ partition }}order by duration) as next_all_at_risk,
        lead(duration) over ({{ partition }}order by duration) as next_duration
    from {{ doubling.source }}
)
{%- endmacro %}
