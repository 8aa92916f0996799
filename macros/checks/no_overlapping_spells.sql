{# A generic test for a spell table: no spell of a subject starts before an earlier one was last seen. Touching spells pass. #}
{% test no_overlapping_spells(model) %}
    {{ adapter.dispatch('_overlapping_spells', 'spellcurve')(model) }}
{% endtest %}


{% macro default___overlapping_spells(model) %}
with spells_with_reach as (
    select
        subject_id, spell_number, started_at, last_seen_at,
        max(last_seen_at) over (
            partition by subject_id order by started_at, last_seen_at, spell_number
            rows between unbounded preceding and 1 preceding
        ) as seen_before_until
    from {{ model }}
    where subject_id is not null and started_at is not null
)

select
    subject_id, spell_number, started_at, last_seen_at, seen_before_until,
    'starts before an earlier spell of the subject was last seen' as problem
from spells_with_reach
where started_at < seen_before_until
{% endmacro %}
