{# A generic test for a spell table: no row that breaks the contract of spells. #}
{% test spells_are_sound(model) %}
    {{ adapter.dispatch('_unsound_spells', 'spellcurve')(model) }}
{% endtest %}


{% macro default___unsound_spells(model) %}
with spells_with_copies as (
    select
        subject_id, spell_number, started_at, last_seen_at, entry, duration, event, cause, weight,
        count(*) over (partition by subject_id, spell_number) as copies
    from {{ model }}
),

spells_with_problems as (
    select
        subject_id, spell_number, started_at, last_seen_at, entry, duration, event, cause, weight,
        case
            when subject_id is null and started_at is not null then 'subject_id is null'
            when spell_number is null or spell_number < 1 then 'spell_number is not 1, 2, …'
            when subject_id is not null and copies > 1 then 'subject_id and spell_number stand on several rows'
            when started_at is null and last_seen_at is not null then 'last_seen_at without started_at'
            when started_at is not null and last_seen_at is null then 'started_at without last_seen_at'
            when last_seen_at < started_at then 'last_seen_at is before started_at'
            when entry is null or entry < 0 then 'entry is null or negative'
            when duration is null or duration < entry then 'duration is null or below entry'
            when floor(entry) <> entry or floor(duration) <> duration then 'entry or duration is not a whole number'
            when event is null or event not in (0, 1) then 'event is neither 0 nor 1'
            when event = 1 and cause is null then 'an event without a cause'
            when event = 0 and cause is not null then 'a cause without an event'
            when weight is null or weight <= 0 then 'weight is null or not above 0'
            when not {{ spellcurve._double('weight') }} < {{ spellcurve._double("'1e300'") }} then 'weight is infinite or not a number'
        end as problem
    from spells_with_copies
)

select subject_id, spell_number, started_at, last_seen_at, entry, duration, event, cause, weight, problem
from spells_with_problems
where problem is not null
{% endmacro %}
