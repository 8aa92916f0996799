{% macro trend_test(spells, between, scores=none, strata=[], weighting='log-rank', by=[], confidence=0.95) %}
    {%- do spellcurve._check_call(
        'trend_test', {'spells': spells, 'between': between},
        ['spells', 'between', 'scores', 'strata', 'weighting', 'by', 'confidence'], kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('trend_test', 'spellcurve')(spells, between, scores, strata, weighting, by, confidence)) }}
{% endmacro %}


{% macro _trend_test_columns() %}
    {{ return([
        'weighting', 'group_count', 'z', 'statistic', 'degrees_of_freedom', 'p_value', 'direction', 'hazard_ratio', 'hazard_ratio_lower',
        'hazard_ratio_upper', 'status'
    ]) }}
{% endmacro %}


{# [[group, score], …], from the groups in their order or from a mapping; none where the group's own number is its score. #}
{% macro _checked_scores(caller_name, scores) %}
    {%- if scores is none -%}
        {{ return(none) }}
    {%- endif -%}
    {%- if scores is string or scores is number or scores is boolean or scores is undefined
        or (scores is not mapping and scores is not sequence) -%}
        {%- do spellcurve._fail(
            caller_name,
            'scores is ' ~ spellcurve._shown(scores) ~ '; it must be a list of groups in their order, or a mapping of each group to a number.'
        ) -%}
    {%- endif -%}
    {%- set pairs = [] -%}
    {%- set names = [] -%}
    {%- for item in scores -%}
        {%- if item is not none and (item is boolean or (item is not string and item is not number)) -%}
            {%- do spellcurve._fail(
                caller_name, 'scores names the group ' ~ spellcurve._shown(item) ~ '; a group is a text, a number or none.'
            ) -%}
        {%- elif item in names -%}
            {%- do spellcurve._fail(caller_name, 'scores names the group ' ~ spellcurve._shown(item) ~ ' twice; name it once.') -%}
        {%- endif -%}
        {%- do names.append(item) -%}
        {%- set score = scores[item] if scores is mapping else loop.index -%}
        {%- if score is boolean or score is not number -%}
            {%- do spellcurve._fail(
                caller_name,
                'scores gives the group ' ~ spellcurve._shown(item) ~ ' the score ' ~ spellcurve._shown(score) ~ '; it must be a number.'
            ) -%}
        {%- endif -%}
        {%- do pairs.append([item, score]) -%}
    {%- endfor -%}
    {%- if pairs | length < 2 -%}
        {%- do spellcurve._fail(caller_name, 'scores names ' ~ pairs | length ~ ' groups; a trend needs two at least.') -%}
    {%- endif -%}
    {{ return(pairs) }}
{% endmacro %}


{# The score of a group, from the column that holds its value as a text. #}
{% macro _score_of(label, scores) %}
    {%- if scores is none -%}
        {{ return(spellcurve._read_number(label)) }}
    {%- endif -%}
    {%- set cases = [] -%}
    {%- for item, score in scores -%}
        {%- if item is none -%}
            {%- set condition = label ~ ' is null' -%}
        {%- elif item is number -%}
            {%- set condition = spellcurve._read_number(label) ~ ' = ' ~ item -%}
        {%- else -%}
            {%- set condition = label ~ ' = ' ~ spellcurve._text(item) -%}
        {%- endif -%}
        {%- do cases.append('when ' ~ condition ~ ' then ' ~ spellcurve._double_literal(score)) -%}
    {%- endfor -%}
    {{ return('case ' ~ cases | join(' ') ~ ' end') }}
{% endmacro %}


{#
    The query, without its provenance. compared: as _compared gives it; scores: as _checked_scores does; weights: as _check_weighting does;
    most_groups: how many groups to prepare for.
#}
{% macro _trend(spells, compared, scores, weights, confidence, most_groups) -%}
{%- set each = compared.each -%}
{%- set z = spellcurve._double_literal(spellcurve._normal_quantile(0.5 + confidence / 2)) -%}
{%- set weighted = weights.kind != 'log-rank' -%}
{%- set of_segment = spellcurve._partition_by(compared.segments) | trim -%}
{%- set of_moment = spellcurve._partition_by(compared.segments + ['stratum', 'duration']) | trim -%}
with {{ spellcurve._weighted_cells(spells, compared, weights, most_groups) }},

scored_cells as (
    select
        {{ each }}stratum, duration, group_count, at_risk, events, all_at_risk, all_events, all_weight,
        {{ spellcurve._score_of('group_label', scores) }} as score
    from weighted_cells
),

-- a trend is the same from whatever score it is counted; from the lowest it keeps most digits
cells_from_lowest as (
    select
        {{ each }}stratum, duration, group_count, at_risk, events, all_at_risk, all_events, all_weight,
        score - min(score) over ({{ of_segment }}) as score,
        max(case when score is null then 1 else 0 end) over ({{ of_segment }}) as lacks_score
    from scored_cells
),

cells_beside_others as (
    select
        {{ each }}group_count, events, all_at_risk, all_events, all_weight, score, lacks_score,
        case when all_at_risk > 0 then at_risk / all_at_risk end as share_at_risk,
        min(case when at_risk > 0 then score end) over ({{ of_moment }}) as lowest_score,
        max(case when at_risk > 0 then score end) over ({{ of_moment }}) as highest_score,
        sum(case when all_at_risk > 0 then score * (at_risk / all_at_risk) end) over ({{ of_moment }}) as mean_score
    from cells_from_lowest
),

-- where all at risk have one score there is nothing to compare, and not a last digit either
deviations as (
    select
        {{ each }}group_count, events, all_at_risk, all_events, all_weight, lacks_score, share_at_risk,
        case when highest_score > lowest_score then score - mean_score else 0 end as deviation
    from cells_beside_others
),

moments as (
    select
        {{ each }}group_count, events, all_weight, lacks_score,
        events * deviation as excess,
        case
            when all_events > 0
                then all_events * ({{ spellcurve._tie_share('all_events', 'all_at_risk') }}) * share_at_risk * deviation * deviation
            else 0
        end as variance
    from deviations
),

sums as (
    select
        {{ each }}max(group_count) as group_count,
        max(lacks_score) as lacks_score,
        sum(events) as events_seen,
        {%- if weighted %}
        sum(all_weight * excess) as weighted_excess,
        sum(all_weight * all_weight * variance) as weighted_variance,
        {%- endif %}
        sum(excess) as excess,
        sum(variance) as variance
    from moments
    {%- if compared.segments %}
    group by {{ compared.segments | join(', ') }}
    {%- endif %}
    having count(*) > 0
),

{% set own_excess, own_variance = ('weighted_excess', 'weighted_variance') if weighted else ('excess', 'variance') -%}
judged_sums as (
    select
        {{ each }}group_count, excess, variance,
        {%- if weighted %}
        weighted_excess, weighted_variance,
        {%- endif %}
        case
            when group_count > {{ most_groups }} then 'too_many_groups'
            when group_count = 1 then 'one_group'
            when lacks_score = 1 then 'group_without_score'
            when not events_seen > 0 then 'no_events'
            when not {{ own_variance }} > 0 then 'nothing_to_compare'
            else 'compared'
        end as status
    from sums
),

trends as (
    select
        {{ each }}group_count, status,
        case when status = 'compared' then {{ own_excess }} / sqrt({{ own_variance }}) end as z,
        case when status = 'compared' then {{ own_excess }} * ({{ own_excess }} / {{ own_variance }}) end as statistic,
        case when status = 'compared' and variance > 0 then excess / variance end as log_hazard_ratio,
        case when status = 'compared' and variance > 0 then 1 / sqrt(variance) end as log_error
    from judged_sums
),

{{ spellcurve._tail_steps('trends', 'chi', 'statistic') }}

select
    {{ spellcurve._aliases_as(compared.segments, compared.by) }}{{ spellcurve._text(weights.shown) }} as weighting,
    {{ spellcurve._integer('group_count') }} as group_count,
    {{ spellcurve._double('z') }} as z,
    {{ spellcurve._double('statistic') }} as statistic,
    {{ spellcurve._integer("case when status = 'compared' then 1 end") }} as degrees_of_freedom,
    {{ spellcurve._double(spellcurve._tail('chi', 'statistic')) }} as p_value,
    case
        when statistic < 1e-20 then 'neither'
        when z > 0 then 'sooner'
        when z < 0 then 'later'
    end as direction,
    {%- for name, margin in [('hazard_ratio', ''), ('hazard_ratio_lower', ' - '), ('hazard_ratio_upper', ' + ')] %}
    {%- set bound = spellcurve._exp('log_hazard_ratio' ~ (margin ~ z ~ ' * log_error' if margin else '')) %}
    {{ spellcurve._double('case when log_error is not null then ' ~ bound ~ ' end') }} as {{ name }},
    {%- endfor %}
    status
from chi_halves
{%- endmacro %}


{% macro default__trend_test(spells, between, scores, strata, weighting, by, confidence) %}
    {%- set caller_name = 'trend_test' -%}
    {%- set compared = spellcurve._compared(caller_name, between, strata, by, spellcurve._trend_test_columns()) -%}
    {%- set pairs = spellcurve._checked_scores(caller_name, scores) -%}
    {%- set weights = spellcurve._check_weighting(caller_name, weighting) -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'between': between, 'scores': pairs, 'strata': compared.strata, 'weighting': weights.shown, 'by': compared.by,
            'confidence': confidence
        }) ~ '\n' ~ spellcurve._trend(spells, compared, pairs, weights, confidence, spellcurve._most_groups())
    ) }}
{% endmacro %}
