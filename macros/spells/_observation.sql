{#
    The rules of observation that every builder shares: as of, observe from, the unit, what is carried, which rows are wanted.
    Checked once, here, and handed on as one mapping.
#}

{% macro _spell_columns() %}
    {{ return([
        'subject_id', 'spell_number', 'started_at', 'last_seen_at', 'entry', 'duration', 'event', 'cause', 'weight', 'source_rows',
        'given_start', 'given_end', 'given_kind', 'fault', 'detail'
    ]) }}
{% endmacro %}


{% macro _observation(caller_name, as_of, observe_from, recorded_at, unit, carry, rows, source_rows, grace=0, grace_name='grace') %}
    {%- do spellcurve._check_choice(caller_name, 'unit', unit, ['day', 'week', 'month', 'hour', 'minute']) -%}
    {%- do spellcurve._check_choice(caller_name, 'rows', rows, ['sound', 'faulty']) -%}
    {%- do spellcurve._check_flag(caller_name, 'source_rows', source_rows) -%}
    {%- do spellcurve._check_whole(caller_name, grace_name, grace, 0) -%}
    {%- if recorded_at is not none -%}
        {%- do spellcurve._check_column(caller_name, 'recorded_at', recorded_at) -%}
    {%- endif -%}
    {%- set carry = spellcurve._check_columns(caller_name, 'carry', carry, spellcurve._spell_columns()) -%}
    {%- if as_of is none -%}
        {%- set as_of = run_started_at.strftime('%Y-%m-%d') -%}
    {%- endif -%}
    {%- set as_of = spellcurve._check_moment(caller_name, 'as_of', as_of) -%}
    {%- if observe_from is not none -%}
        {%- set observe_from = spellcurve._check_moment(caller_name, 'observe_from', observe_from) -%}
        {%- if observe_from > as_of -%}
            {%- do spellcurve._fail(
                caller_name, "observe_from '" ~ observe_from ~ "' is later than as_of '" ~ as_of ~ "'; it must not be."
            ) -%}
        {%- endif -%}
    {%- endif -%}
    {%- set by_day = unit in ('day', 'week', 'month') -%}
    {{ return({
        'caller': caller_name,
        'as_of': as_of,
        'as_of_sql': spellcurve._moment_literal(as_of),
        'observe_from': observe_from,
        'recorded_at': recorded_at,
        'unit': unit,
        'by_day': by_day,
        'clock': 'day' if by_day else unit,
        'carry': carry,
        'carried': spellcurve._aliases(carry, 'carried_'),
        'rows': rows,
        'source_rows': source_rows
    }) }}
{% endmacro %}


{# 'YYYY-MM-DD HH:MM:SS' from a date, a datetime or such a text. #}
{% macro _check_moment(caller_name, argument, value) %}
    {%- set text = value.isoformat() if value is not string and value.isoformat is defined else value -%}
    {%- set text = text | string -%}
    {%- set pattern = '^([0-9]{4})-([0-9]{2})-([0-9]{2})(?:[ T]([0-9]{2}):([0-9]{2})(?::([0-9]{2}))?)?$' -%}
    {%- set found = modules.re.match(pattern, text) -%}
    {%- set allowed = "; it must be a date 'YYYY-MM-DD' or a moment 'YYYY-MM-DD HH:MM:SS'." -%}
    {%- if not found -%}
        {%- do spellcurve._fail(caller_name, argument ~ ' is ' ~ spellcurve._shown(value) ~ allowed) -%}
    {%- endif -%}
    {%- set year, month, day = found.group(1) | int, found.group(2) | int, found.group(3) | int -%}
    {%- set leap = (year % 4 == 0 and year % 100 != 0) or year % 400 == 0 -%}
    {%- set month_lengths = [31, 29 if leap else 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31] -%}
    {%- set hour, minute, second = found.group(4) or '00', found.group(5) or '00', found.group(6) or '00' -%}
    {%- if year < 1 or month < 1 or month > 12 or day < 1 or day > month_lengths[month - 1]
        or hour | int > 23 or minute | int > 59 or second | int > 59 -%}
        {%- do spellcurve._fail(caller_name, argument ~ ' is ' ~ spellcurve._shown(value) ~ ', which no calendar has' ~ allowed) -%}
    {%- endif -%}
    {{ return(text[:10] ~ ' ' ~ hour ~ ':' ~ minute ~ ':' ~ second) }}
{% endmacro %}


{# Beyond every moment a warehouse keeps: the end of what has not ended. #}
{% macro _never() %}
    {{ return(spellcurve._moment_literal('9999-12-31 00:00:00')) }}
{% endmacro %}


{# Completed units from one moment to a later one. #}
{% macro _completed_units(earlier, later, unit) %}
    {%- if unit == 'day' -%}
        {{ return(spellcurve._integer(spellcurve._days_between(earlier, later))) }}
    {%- elif unit == 'week' -%}
        {{ return(spellcurve._integer('floor(' ~ spellcurve._days_between(earlier, later) ~ ' / 7.0)')) }}
    {%- elif unit == 'month' -%}
        {{ return(spellcurve._integer(
            '12 * (extract(year from ' ~ later ~ ') - extract(year from ' ~ earlier ~ ')) + extract(month from ' ~ later
            ~ ') - extract(month from ' ~ earlier ~ ') - case when extract(day from ' ~ later ~ ') < extract(day from ' ~ earlier
            ~ ') then 1 else 0 end'
        )) }}
    {%- else -%}
        {%- set length = spellcurve._microseconds_in(unit) -%}
        {%- set elapsed = spellcurve._microseconds_between(earlier, later) -%}
        {{ return(spellcurve._integer('(' ~ elapsed ~ ' - mod(' ~ elapsed ~ ', ' ~ length ~ ')) / ' ~ length)) }}
    {%- endif -%}
{% endmacro %}


{% macro _microseconds_in(unit) %}
    {{ return({'hour': 3600000000, 'minute': 60000000}[unit]) }}
{% endmacro %}


{# Whether a gap is below a number of days (hours, minutes): strictly, or with `inclusive` also where it equals that number. #}
{% macro _gap_is_within(earlier, later, amount, inclusive, observation) %}
    {%- set sign = ' <= ' if inclusive else ' < ' -%}
    {%- if observation.by_day -%}
        {{ return(spellcurve._days_between(earlier, later) ~ sign ~ amount) }}
    {%- else -%}
        {{ return(
            spellcurve._microseconds_between(earlier, later) ~ sign ~ amount * spellcurve._microseconds_in(observation.unit)
        ) }}
    {%- endif -%}
{% endmacro %}


{# earlier < later as the unit sees it: by date where it is a day or longer, by the moment itself where it is shorter. #}
{% macro _is_before(earlier, later, observation) %}
    {%- if observation.by_day -%}
        {{ return('cast(' ~ earlier ~ ' as date) < cast(' ~ later ~ ' as date)') }}
    {%- else -%}
        {{ return(earlier ~ ' < ' ~ later) }}
    {%- endif -%}
{% endmacro %}


{# The faults that every builder looks for first, each [code, condition, detail]. #}
{% macro _recording_faults(observation) %}
    {%- if observation.recorded_at is none -%}
        {{ return([]) }}
    {%- endif -%}
    {{ return([
        [
            'unreadable_recorded_at', 'raw_recorded is not null and recorded is null',
            spellcurve._detail('recorded_at', 'raw_recorded', 'is not a date or a time')
        ],
        [
            'recorded_after_as_of', 'recorded > ' ~ observation.as_of_sql,
            spellcurve._detail('recorded_at', 'raw_recorded', 'is after as_of ' ~ observation.as_of)
        ]
    ]) }}
{% endmacro %}


{# "name 'value' words", in SQL. #}
{% macro _detail(name, raw, words) %}
    {{ return(
        spellcurve._text(name ~ " '") ~ ' || coalesce(' ~ spellcurve._as_text(raw) ~ ", 'null') || "
        ~ spellcurve._text("' " ~ words)
    ) }}
{% endmacro %}


{# The columns `fault` and, where the faulty rows are wanted, `detail`: the first of the rules that applies. #}
{% macro _first_fault(rules, observation, so_far=false) -%}
case
    {%- if so_far %}
    when fault is not null then fault
    {%- endif %}
    {%- for code, condition, detail in rules %}
    when {{ condition }} then '{{ code }}'
    {%- endfor %}
end as fault
{%- if observation.rows == 'faulty' %},
case
    {%- if so_far %}
    when fault is not null then detail
    {%- endif %}
    {%- for code, condition, detail in rules %}
    when {{ condition }} then {{ detail }}
    {%- endfor %}
end as detail
{%- endif %}
{%- endmacro %}


{#
    Rows already refused must not take part in what follows. Where the sound rows are wanted they are left out; where the faulty
    ones are wanted they are kept, in a partition of their own.
#}
{% macro _without_refused(observation) %}
    {{ return('where fault is null' if observation.rows == 'sound' else '') }}
{% endmacro %}

{% macro _apart_from_refused(observation) %}
    {{ return('' if observation.rows == 'sound' else ', case when fault is null then 0 else 1 end') }}
{% endmacro %}


{% macro _recorded_columns(observation) %}
    {%- if observation.recorded_at is not none %}
        {{ spellcurve._column(observation.recorded_at) }} as raw_recorded,
        {{ spellcurve._read_moment(spellcurve._column(observation.recorded_at)) }} as recorded,
    {%- endif %}
{%- endmacro %}


{# ", carried_1, carried_2" #}
{% macro _carried(observation) %}
    {%- for alias in observation.carried %}, {{ alias }}{% endfor -%}
{%- endmacro %}

{% macro _carried_from_source(observation) %}
    {%- for name in observation.carry %}, {{ spellcurve._column(name) }} as {{ observation.carried[loop.index0] }}{% endfor -%}
{%- endmacro %}

{% macro _carried_to_result(observation) %}
    {%- for name in observation.carry %}, {{ observation.carried[loop.index0] }} as {{ spellcurve._column(name) }}{% endfor -%}
{%- endmacro %}


{# The columns that only the faulty rows need: the raw values, and the detail. #}
{% macro _raw(observation) %}
    {%- if observation.rows == 'faulty' %}, raw_start, raw_end, raw_kind, detail{% endif -%}
{%- endmacro %}
