{% macro log_rank_test(
    spells, between, strata=[], weighting='log-rank', pairs='none', reference=none, by=[], adjustment='holm', confidence=0.95,
    most_groups=none
) %}
    {%- do spellcurve._check_call(
        'log_rank_test',
        {'spells': spells, 'between': between},
        ['spells', 'between', 'strata', 'weighting', 'pairs', 'reference', 'by', 'adjustment', 'confidence', 'most_groups'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('log_rank_test', 'spellcurve')(
        spells, between, strata, weighting, pairs, reference, by, adjustment, confidence, most_groups
    )) }}
{% endmacro %}


{% macro _log_rank_test_columns() %}
    {{ return([
        'comparison', 'group_a', 'group_b', 'weighting', 'statistic', 'degrees_of_freedom', 'p_value', 'p_value_adjusted',
        'observed_a', 'expected_a', 'observed_b', 'expected_b', 'hazard_ratio', 'hazard_ratio_lower', 'hazard_ratio_upper', 'status'
    ]) }}
{% endmacro %}


{% macro default__log_rank_test(
    spells, between, strata, weighting, pairs, reference, by, adjustment, confidence, most_groups
) %}
    {%- set caller_name = 'log_rank_test' -%}
    {%- set compared = spellcurve._compared(caller_name, between, strata, by, spellcurve._log_rank_test_columns()) -%}
    {%- set weights = spellcurve._check_weighting(caller_name, weighting) -%}
    {%- do spellcurve._check_choice(caller_name, 'pairs', pairs, ['none', 'all', 'reference']) -%}
    {%- do spellcurve._check_reference(caller_name, reference, pairs == 'reference', "pairs is '" ~ pairs ~ "'") -%}
    {%- do spellcurve._check_choice(caller_name, 'adjustment', adjustment, spellcurve._adjustments()) -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- set most_groups = spellcurve._most_groups() if most_groups is none else most_groups -%}
    {%- do spellcurve._check_most_groups(caller_name, most_groups) -%}
    {%- set each = compared.each -%}
    {%- set segments = compared.segments -%}
    {%- set z = spellcurve._double_literal(spellcurve._normal_quantile(0.5 + confidence / 2)) -%}
    {%- set is_reference = spellcurve._is_reference(compared.group, reference) if pairs == 'reference' else none -%}
    {%- set weighted = weights.kind != 'log-rank' -%}

    {#- what every row carries through the elimination: who is compared, and the sums that the rows of pairs are made of -#}
    {%- set carried = ['first_group', 'second_group', 'group_count', 'all_observed'] -%}
    {%- if pairs != 'none' -%}
        {%- set carried = carried + [
            'first_label', 'second_label', 'reference_number', 'first_observed', 'second_observed', 'first_expected', 'second_expected',
            'excess', 'variance'
        ] + (['weighted_excess', 'weighted_variance'] if weighted else []) -%}
    {%- endif -%}
    {%- set carried_sql = each ~ carried | join(', ') -%}

    {%- set sql -%}
with {{ spellcurve._weighted_cells(spells, compared, weights, most_groups, is_reference) }},

-- every two groups side by side, and every group beside itself
pair_cells as (
    select
        {{ each }}stratum, duration,
        least(group_number, number) as first_group,
        greatest(group_number, number) as second_group,
        max(group_count) as group_count,
        max(reference_number) as reference_number,
        {%- for side, condition in [('first', 'group_number <= number'), ('second', 'group_number > number')] %}
        max(case when {{ condition }} then group_label end) as {{ side }}_label,
        sum(case when {{ condition }} then at_risk else 0 end) as {{ side }}_at_risk,
        sum(case when {{ condition }} then events else 0 end) as {{ side }}_events,
        {%- endfor %}
        max(all_at_risk) as all_at_risk,
        max(all_events) as all_events,
        max(all_weight) as all_weight
    from weighted_cells
    inner join numbers on number <= group_count
    group by {{ each }}stratum, duration, least(group_number, number), greatest(group_number, number)
),

{% if pairs != 'none' -%}
pair_totals as (
    select
        *,
        first_at_risk + second_at_risk as pair_at_risk,
        first_events + second_events as pair_events
    from pair_cells
),

{{ spellcurve._weighted('pair_totals', 'weighted_pair_cells', 'pair', weights, segments + ['stratum', 'first_group', 'second_group']) }},

{% endif -%}
moments as (
    select
        *,
        case
            when all_events > 0 then all_weight * (first_events - all_events * (first_at_risk / all_at_risk))
            else 0
        end as score,
        case
            when all_events > 0 and first_group < second_group
                then all_weight * all_weight * all_events * ({{ spellcurve._tie_share('all_events', 'all_at_risk') }})
                    * (first_at_risk / all_at_risk) * (second_at_risk / all_at_risk)
            else 0
        end as link
        {%- if pairs != 'none' %},
        case when pair_events > 0 then pair_events * (first_at_risk / pair_at_risk) else 0 end as first_expected,
        case when pair_events > 0 then pair_events * (second_at_risk / pair_at_risk) else 0 end as second_expected,
        case when pair_events > 0 then first_events - pair_events * (first_at_risk / pair_at_risk) else 0 end as excess,
        case
            when pair_events > 0
                then pair_events * ({{ spellcurve._tie_share('pair_events', 'pair_at_risk') }})
                    * (first_at_risk / pair_at_risk) * (second_at_risk / pair_at_risk)
            else 0
        end as variance
        {%- endif %}
    from {{ 'weighted_pair_cells' if pairs != 'none' else 'pair_cells' }}
),

sums as (
    select
        {{ each }}first_group, second_group,
        max(group_count) as group_count,
        sum(score) as score,
        sum(link) as link,
        {%- if pairs != 'none' %}
        max(reference_number) as reference_number,
        max(first_label) as first_label,
        max(second_label) as second_label,
        sum(second_events) as second_observed,
        sum(first_expected) as first_expected,
        sum(second_expected) as second_expected,
        sum(excess) as excess,
        sum(variance) as variance,
        {%- if weighted %}
        sum(pair_weight * excess) as weighted_excess,
        sum(pair_weight * pair_weight * variance) as weighted_variance,
        {%- endif %}
        {%- endif %}
        sum(first_events) as first_observed
    from moments
    group by {{ each }}first_group, second_group
),

sums_with_total as (
    select
        *,
        sum(case when first_group = second_group then first_observed else 0 end) over (
            {{ spellcurve._throughout(segments) }}
        ) as all_observed
    from sums
),

{{ spellcurve._whole_numbers('places', 'place', 1, 6) }},

-- the covariances off the diagonal, their signs turned, bordered in row and column 0 by the scores; the rows of pairs stand aside at -1
matrix_0 as (
    select
        {{ carried_sql }},
        case place when 1 then first_group when 2 then second_group when 3 then first_group when 6 then -1 else 0 end as row_at,
        case place when 1 then second_group when 2 then first_group when 4 then first_group when 6 then -1 else 0 end as column_at,
        case when place <= 2 then link when place <= 4 then score else 0 end as figure,
        0 as rank_so_far
    from sums_with_total
    inner join places
        on
            (first_group < second_group and place <= 2)
            or (first_group = second_group and (place in (3, 4) or (place = 5 and first_group = 1)))
            {%- if pairs == 'all' %}
            or (first_group < second_group and place = 6 and group_count <= {{ most_groups }})
            {%- elif pairs == 'reference' %}
            or (
                place = 6 and group_count <= {{ most_groups }}
                and (
                    (first_group < second_group and (first_group = reference_number or second_group = reference_number))
                    or (first_group = second_group and reference_number is null)
                )
            )
            {%- endif %}
),

{{ spellcurve._eliminate('matrix', most_groups - 1, segments, carried_sql) }},

comparisons as (
    select
        {{ each }}row_at, group_count,
        {%- if pairs == 'none' %}
        {{ spellcurve._as_text('null') }} as group_a,
        {{ spellcurve._as_text('null') }} as group_b,
        {%- for name in ['observed_a', 'expected_a', 'observed_b', 'expected_b', 'log_hazard_ratio', 'information'] %}
        {{ spellcurve._double('null') }} as {{ name }},
        {%- endfor %}
        figure as statistic,
        rank_so_far as degrees_of_freedom,
        group_count - 1 as full_degrees,
        all_observed as events_seen,
        0 as lacks_reference
        {%- else %}
        {%- set turned = 'first_group = reference_number' if pairs == 'reference' else none %}
        {%- set both = [('group', 'label', '_as_text'), ('observed', 'observed', '_double'), ('expected', 'expected', '_double')] %}
        {%- for name, source, type in both %}
        {%- for side, one, other in [('a', 'first_', 'second_'), ('b', 'second_', 'first_')] %}
        {%- set straight = one ~ source if turned is none else
            'case when ' ~ turned ~ ' then ' ~ other ~ source ~ ' else ' ~ one ~ source ~ ' end' %}
        {%- if pairs == 'reference' and name == 'group' and side == 'b' %}
        {%- set straight = 'case when reference_number is null then ' ~ spellcurve._text(reference) ~ ' else ' ~ straight ~ ' end' %}
        {%- elif pairs == 'reference' and name != 'group' %}
        {%- set straight = 'case when reference_number is not null then ' ~ straight ~ ' end' %}
        {%- endif %}
        case when row_at = -1 then {{ straight }} end as {{ name }}_{{ side }},
        {%- endfor %}
        {%- endfor %}
        case
            when row_at = -1 and variance > 0
                then {{ '' if turned is none else 'case when ' ~ turned ~ ' then -1 else 1 end * ' }}excess / variance
        end as log_hazard_ratio,
        case when row_at = -1 and variance > 0 then variance end as information,
        {%- set excess, variance = ('weighted_excess', 'weighted_variance') if weighted else ('excess', 'variance') %}
        case
            when row_at = 0 then figure
            when {{ variance }} > 0 then {{ excess }} * ({{ excess }} / {{ variance }})
        end as statistic,
        case
            when row_at = 0 then rank_so_far
            when {{ variance }} > 0 then 1
            else 0
        end as degrees_of_freedom,
        case when row_at = 0 then group_count - 1 else 1 end as full_degrees,
        case when row_at = 0 then all_observed else first_observed + second_observed end as events_seen,
        {%- if pairs == 'reference' %}
        case when row_at = -1 and reference_number is null then 1 else 0 end as lacks_reference
        {%- else %}
        0 as lacks_reference
        {%- endif %}
        {%- endif %}
    from matrix_eliminated
    where row_at = -1 or (row_at = 0 and column_at = 0)
),

judged_comparisons as (
    select
        *,
        case
            when group_count > {{ most_groups }} then 'too_many_groups'
            when lacks_reference = 1 then 'reference_not_found'
            when full_degrees = 0 then 'one_group'
            when not events_seen > 0 then 'no_events'
            when degrees_of_freedom = 0 then 'nothing_to_compare'
            when degrees_of_freedom < full_degrees then 'fewer_degrees_of_freedom'
            else 'compared'
        end as status
    from comparisons
),

tested_comparisons as (
    select
        {{ each }}row_at, group_a, group_b, observed_a, expected_a, observed_b, expected_b, log_hazard_ratio, information, status,
        case when status in ('compared', 'fewer_degrees_of_freedom') then statistic end as statistic,
        case when status in ('compared', 'fewer_degrees_of_freedom') then degrees_of_freedom end as degrees_of_freedom
    from judged_comparisons
),

{{ spellcurve._tail_steps('tested_comparisons', 'chi', 'statistic', 'degrees_of_freedom', most_groups - 1) }},

comparisons_with_p_values as (
    select
        {{ each }}row_at, group_a, group_b, observed_a, expected_a, observed_b, expected_b, log_hazard_ratio, information, status,
        statistic, degrees_of_freedom,
        {{ spellcurve._tail('chi', 'statistic') }} as p_value
    from chi_halves
),

{{ spellcurve._adjusted('comparisons_with_p_values', 'adjusted_comparisons', 'p_value', adjustment, segments + ['row_at'], 'row_at = -1') }}

select
    {{ spellcurve._aliases_as(segments, compared.by) -}}
    case when row_at = 0 then 'all groups' else {{ spellcurve._versus('group_a', 'group_b') }} end as comparison,
    group_a, group_b,
    {{ spellcurve._text(weights.shown) }} as weighting,
    {{ spellcurve._double('statistic') }} as statistic,
    {{ spellcurve._integer('degrees_of_freedom') }} as degrees_of_freedom,
    {{ spellcurve._double('p_value') }} as p_value,
    {{ spellcurve._double('p_value_adjusted') }} as p_value_adjusted,
    {{ spellcurve._double('observed_a') }} as observed_a,
    {{ spellcurve._double('expected_a') }} as expected_a,
    {{ spellcurve._double('observed_b') }} as observed_b,
    {{ spellcurve._double('expected_b') }} as expected_b,
    {%- for name, margin in [('hazard_ratio', ''), ('hazard_ratio_lower', ' - '), ('hazard_ratio_upper', ' + ')] %}
    {%- set bound = spellcurve._exp('log_hazard_ratio' ~ (margin ~ z ~ ' / sqrt(information)' if margin else '')) %}
    {{ spellcurve._double('case when information > 0 then ' ~ bound ~ ' end') }} as {{ name }},
    {%- endfor %}
    status
from adjusted_comparisons
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'between': between, 'strata': compared.strata, 'weighting': weights.shown, 'pairs': pairs,
            'reference': reference, 'by': compared.by, 'adjustment': adjustment, 'confidence': confidence, 'most_groups': most_groups
        }) ~ '\n' ~ sql
    ) }}
{% endmacro %}
