{#
    Each published figure beside the computed one. They agree when they differ by no more than half a unit of the
    last printed place. A figure printed as not reached has a null printed_value, and agrees with a null figure.
    The keys stand in for nulls, so that plain equality joins them: no duration is negative, and whether a group is
    null is a key of its own.
#}
with

published as (
    select
        data_set,
        group_value,
        coalesce({{ spellcurve._as_text('group_value') }}, '') as group_key,
        case when group_value is null then 1 else 0 end as group_is_null,
        figure,
        {{ spellcurve._integer('duration') }} as duration,
        coalesce({{ spellcurve._integer('duration') }}, -1) as duration_key,
        {{ spellcurve._double('printed_value') }} as printed_value,
        {{ spellcurve._integer('printed_decimals') }} as printed_decimals,
        {{ spellcurve._double('0.5') }} / power(10, printed_decimals) + {{ spellcurve._double('0.000000001') }}
            as allowed_difference,
        source,
        from_memory
    from {{ ref('reference_published_figures') }}
),

computed as (
    select
        data_set as computed_data_set,
        coalesce(group_value, '') as computed_group_key,
        case when group_value is null then 1 else 0 end as computed_group_is_null,
        figure as computed_figure,
        coalesce(duration, -1) as computed_duration_key,
        computed_value
    from {{ ref('reference_figures') }}
),

side_by_side as (
    select
        published.data_set,
        published.group_value,
        published.figure,
        published.duration,
        published.printed_value,
        published.printed_decimals,
        published.allowed_difference,
        published.source,
        published.from_memory,
        case when computed.computed_data_set is null then 0 else 1 end as is_found,
        computed.computed_value
    from published
    left join computed
        on published.data_set = computed.computed_data_set
        and published.group_key = computed.computed_group_key
        and published.group_is_null = computed.computed_group_is_null
        and published.figure = computed.computed_figure
        and published.duration_key = computed.computed_duration_key
),

judged as (
    select
        data_set,
        group_value,
        figure,
        duration,
        printed_value,
        printed_decimals,
        computed_value,
        case
            when is_found = 0 then 'not found'
            when printed_value is null and computed_value is null then 'agrees'
            when abs(computed_value - printed_value) <= allowed_difference then 'agrees'
            else 'disagrees'
        end as verdict,
        source,
        from_memory
    from side_by_side
)

select
    data_set,
    group_value,
    figure,
    duration,
    printed_value,
    printed_decimals,
    computed_value,
    verdict,
    case when verdict = 'agrees' then 1 end as agrees,
    source,
    from_memory
from judged
