{% macro actuarial_table(
    spells, by=[], width=none, horizon=none, minimum_at_risk=0, small_counts='keep', weights='whole'
) %}
    {%- do spellcurve._check_call(
        'actuarial_table',
        {'spells': spells, 'width': width},
        ['spells', 'by', 'width', 'horizon', 'minimum_at_risk', 'small_counts', 'weights'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('actuarial_table', 'spellcurve')(
        spells, by, width, horizon, minimum_at_risk, small_counts, weights
    )) }}
{% endmacro %}


{% macro _actuarial_table_columns() %}
    {{ return([
        'from_duration', 'to_duration', 'entering', 'censored', 'exposed', 'events', 'hazard_share', 'survival', 'std_error'
    ]) }}
{% endmacro %}


{% macro default__actuarial_table(spells, by, width, horizon, minimum_at_risk, small_counts, weights) %}
    {%- set caller_name = 'actuarial_table' -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, spellcurve._actuarial_table_columns()) -%}
    {%- do spellcurve._check_whole(caller_name, 'width', width, 1) -%}
    {%- do spellcurve._check_whole(caller_name, 'minimum_at_risk', minimum_at_risk, 0) -%}
    {%- do spellcurve._check_choice(caller_name, 'small_counts', small_counts, ['keep', 'hide']) -%}
    {%- do spellcurve._check_choice(caller_name, 'weights', weights, ['whole', 'fractional']) -%}
    {%- if horizon is not none -%}
        {%- do spellcurve._check_whole(caller_name, 'horizon', horizon, 1) -%}
        {%- if horizon % width != 0 -%}
            {%- do spellcurve._fail(
                caller_name, 'horizon is ' ~ horizon ~ ' and width is ' ~ width ~ '; horizon must be a whole number of bands.'
            ) -%}
        {%- endif -%}
    {%- endif -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set keys = [] -%}
    {%- for name in by -%}{%- do keys.append(spellcurve._column(name)) -%}{%- endfor -%}
    {%- set weight = spellcurve._double('weight') -%}
    {%- set from_the_end = partition ~ 'order by band desc rows between unbounded preceding and current row' -%}
    {%- set so_far = partition ~ 'order by band rows between unbounded preceding and current row' -%}

    {%- set body -%}
with outcomes as (
    select
        {{ spellcurve._columns_as(by, groups) }}entry as entry,
        duration as duration,
        sum(case when event = 1 then {{ weight }} else 0 end) as events,
        sum({{ weight }}) as spells
    from {{ spells }}
    group by {{ spellcurve._each_then_comma(keys) }}entry, duration
),

{{ spellcurve._whole_numbers('sides', 'side', 1, 3) }},

-- each outcome in the band where it ends (1) and in the one where it enters late (2); every group has its first band (3)
turns as (
    select
        {{ each_group -}}
        case side
            when 1 then (duration - mod(duration, {{ width }})) / {{ width }}
            when 2 then (entry - mod(entry, {{ width }})) / {{ width }}
            else 0
        end as band,
        case when side = 1 then events else 0 end as events,
        case when side = 1 then spells - events else 0 end as censored,
        case when side = 2 and mod(entry, {{ width }}) = 0 then spells else 0 end as joined_at_start,
        case when side = 2 and mod(entry, {{ width }}) > 0 then spells else 0 end as joined_within
    from outcomes
    cross join sides
    where
        side = 3
        or (side = 1 and (entry < duration or entry = 0))
        or (side = 2 and entry > 0 and entry < duration)
),

changes as (
    select
        {{ each_group }}{{ spellcurve._integer('band') }} as band,
        sum(events) as events,
        sum(censored) as censored,
        sum(joined_at_start) as joined_at_start,
        sum(joined_within) as joined_within
    from turns
    group by {{ each_group }}{{ spellcurve._integer('band') }}
),

-- counted from the longest duration backwards: who ends here or later, without those who join later
counted_changes as (
    select
        {{ each_group }}band, events, censored, joined_at_start, joined_within,
        lead(band) over ({{ partition }}order by band) as next_band,
        sum(events + censored - joined_at_start - joined_within) over ({{ from_the_end }}) as leaving_on_balance,
        sum(events + censored) over ({{ partition | trim }}) as all_leaving
    from changes
),

changes_with_entering as (
    select
        {{ each_group }}band, events, censored, joined_within, next_band,
        {% set entering = 'leaving_on_balance + joined_at_start' -%}
        {%- set staying = 'leaving_on_balance + joined_at_start + joined_within - events - censored' -%}
        {%- for count, name in [(entering, 'entering'), (staying, 'staying')] %}
        case when {{ count }} > 1e-12 * all_leaving then {{ count }} else 0 end as {{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from counted_changes
),

{{ spellcurve._repeated_rows('bands_counted', 'changes_with_entering', 'coalesce(next_band, band + 1) - band') }},

-- a band in which nobody ends or joins has all who stayed from the one before
bands as (
    select
        {{ each_group }}band + units_on as band,
        case when units_on = 0 then entering else staying end as entering,
        case when units_on = 0 then events else 0 end as events,
        case when units_on = 0 then censored else 0 end as censored,
        case when units_on = 0 then joined_within else 0 end as joined_within
    from bands_counted
    {%- if horizon is not none %}
    where (band + units_on) * {{ width }} < {{ horizon }}
    {%- endif %}
),

exposures as (
    select
        {{ each_group }}band, entering, events, censored,
        entering + joined_within / 2 - censored / 2 as exposed
    from bands
),

hazards as (
    select
        {{ each_group }}band, entering, events, censored, exposed,
        case
            when events <= 0 then 0
            when events >= exposed * (1 - 1e-12) then 1
            else events / exposed
        end as hazard_share,
        case when events > 0 and events >= exposed * (1 - 1e-12) then 1 else 0 end as takes_all,
        case when events > 0 and events < exposed then events / (2 * exposed - events) else 0 end as thin_share
    from exposures
),

steps_of_table as (
    select
        {{ each_group }}band, entering, events, censored, exposed, hazard_share,
        {{ spellcurve._log_step('events', 'exposed') }} as log_step,
        case when events > 0 and takes_all = 0 then hazard_share / (exposed - events) else 0 end as greenwood_step
    from hazards
),

running_sums as (
    select
        {{ each_group }}band, entering, events, censored, exposed, hazard_share,
        sum(log_step) over ({{ so_far }}) as log_survival,
        sum(greenwood_step) over ({{ so_far }}) as greenwood_sum
    from steps_of_table
),

figures as (
    select
        {{ each_group }}band, entering, events, censored, exposed, hazard_share, greenwood_sum,
        {{ spellcurve._survival_of('log_survival') }} as survival
    from running_sums
),

rows_of_table as (
    select
        {{ each_group }}band * {{ width }} as from_duration,
        (band + 1) * {{ width }} as to_duration,
        entering, censored, exposed, events, hazard_share, survival,
        case when survival > 0 then survival * sqrt(greenwood_sum) end as std_error
    from figures
)

select
    {{ spellcurve._aliases_as(groups, by) }}{{ spellcurve._integer('from_duration') }} as from_duration,
    {{ spellcurve._integer('to_duration') }} as to_duration,
    {%- set enough = 'case when entering >= ' ~ minimum_at_risk ~ ' then ' %}
    {%- set hides = small_counts == 'hide' and minimum_at_risk > 0 %}
    {%- for name in ['entering', 'censored', 'exposed', 'events'] %}
    {%- set count = spellcurve._double(name) if name == 'exposed' else spellcurve._count(name, weights) %}
    {{ enough ~ count ~ ' end' if hides else count }} as {{ name }},
    {%- endfor %}
    {%- for name in ['hazard_share', 'survival', 'std_error'] %}
    {%- set figure = spellcurve._double(name) %}
    {{ enough ~ figure ~ ' end' if minimum_at_risk > 0 else figure }} as {{ name }}{{ ',' if not loop.last }}
    {%- endfor %}
from rows_of_table
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'by': by, 'width': width, 'horizon': horizon, 'minimum_at_risk': minimum_at_risk, 'small_counts': small_counts,
            'weights': weights
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
