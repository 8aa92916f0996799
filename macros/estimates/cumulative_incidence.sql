{% macro cumulative_incidence(
    spells, by=[], confidence=0.95, interval_scale='log-log', horizon=none, grid='steps', minimum_at_risk=0, small_counts='keep',
    weights='whole', causes=none, others='competing'
) %}
    {%- do spellcurve._check_call(
        'cumulative_incidence',
        {'spells': spells},
        ['spells', 'by', 'confidence', 'interval_scale', 'horizon', 'grid', 'minimum_at_risk', 'small_counts', 'weights', 'causes',
         'others'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('cumulative_incidence', 'spellcurve')(
        spells, by, confidence, interval_scale, horizon, grid, minimum_at_risk, small_counts, weights, causes, others
    )) }}
{% endmacro %}


{% macro _cumulative_incidence_columns() %}
    {{ return([
        'cause', 'duration', 'at_risk', 'events', 'incidence', 'std_error', 'incidence_lower', 'incidence_upper', 'others'
    ]) }}
{% endmacro %}


{% macro default__cumulative_incidence(
    spells, by, confidence, interval_scale, horizon, grid, minimum_at_risk, small_counts, weights, causes, others
) %}
    {%- set caller_name = 'cumulative_incidence' -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, spellcurve._cumulative_incidence_columns()) -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- do spellcurve._check_choice(caller_name, 'interval_scale', interval_scale, spellcurve._interval_scales()) -%}
    {%- do spellcurve._check_rows_wanted(caller_name, grid, horizon, minimum_at_risk, small_counts) -%}
    {%- do spellcurve._check_choice(caller_name, 'weights', weights, ['whole', 'fractional']) -%}
    {%- do spellcurve._check_choice(caller_name, 'others', others, ['competing', 'censored']) -%}
    {%- set labels = spellcurve._cause_labels(caller_name, causes) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups + ['cause_number']) -%}
    {%- set so_far = partition ~ 'order by duration rows between unbounded preceding and current row' -%}
    {%- set before = partition ~ 'order by duration rows between unbounded preceding and 1 preceding' -%}
    {%- set to_come = partition ~ 'order by duration desc rows between unbounded preceding and 1 preceding' -%}
    {%- set z = spellcurve._normal_quantile(0.5 + confidence / 2) -%}
    {%- set row_key = each_group ~ 'cause_number, cause, duration, is_step, at_risk, events' -%}

    {%- set ctes -%}
{{ spellcurve._cause_risk_sets(spells, by, horizon, weights, labels) }},

competitors as (
    select
        {{ row_key }},
        {{ 'all_events - events' if others == 'competing' else '0' }} as other_events,
        {{ 'all_events' if others == 'competing' else 'events' }} as ended
    from cause_risk_sets
),

hazards as (
    select
        {{ row_key }},
        ended,
        case when at_risk > 0 then ended / at_risk else 0 end as hazard,
        case when at_risk > 0 then events / at_risk else 0 end as own_hazard,
        case when at_risk > 0 then other_events / at_risk else 0 end as other_hazard,
        case when ended > 0 and ended >= at_risk * (1 - 1e-12) then 1 else 0 end as takes_all,
        case when ended > 0 then ended / (2 * at_risk - ended) else 0 end as thin_share
    from competitors
),

steps_of_curve as (
    select
        {{ row_key }}, own_hazard, other_hazard,
        case when at_risk > 0 then 1 / at_risk else 0 end as one_of_them,
        case when takes_all = 0 and ended > 0 then 1 / (at_risk - ended) else 0 end as one_of_those_left,
        {{ spellcurve._log_step('ended', 'at_risk') }} as log_step,
        case when ended > 0 and takes_all = 0 then hazard / (at_risk - ended) else 0 end as greenwood_step
    from hazards
),

running_sums as (
    select
        {{ row_key }}, own_hazard, other_hazard, one_of_them, one_of_those_left,
        sum(log_step) over ({{ so_far }}) as log_survival,
        coalesce(sum(log_step) over ({{ before }}), 0) as log_survival_before,
        sum(greenwood_step) over ({{ so_far }}) as greenwood_sum,
        coalesce(sum(greenwood_step) over ({{ before }}), 0) as greenwood_before
    from steps_of_curve
),

survivals as (
    select
        {{ row_key }}, own_hazard, other_hazard, one_of_them, one_of_those_left, greenwood_sum, greenwood_before,
        {{ spellcurve._survival_of('log_survival') }} as survival,
        {{ spellcurve._survival_of('log_survival_before') }} as survival_before
    from running_sums
),

jumps as (
    select
        {{ row_key }}, own_hazard, other_hazard, one_of_them, one_of_those_left, greenwood_sum, greenwood_before, survival,
        survival_before,
        survival_before * own_hazard as own_jump,
        survival_before * other_hazard as other_jump,
        survival_before * own_hazard * (greenwood_before - one_of_them) as covariance_step
    from survivals
),

-- what is still to come, summed from the end, keeps its digits where the incidence is almost complete
incidences as (
    select
        {{ row_key }}, own_hazard, other_hazard, one_of_them, one_of_those_left, greenwood_sum, greenwood_before, survival,
        survival_before, own_jump,
        sum(own_jump) over ({{ so_far }}) as incidence,
        sum(other_jump) over ({{ so_far }}) as other_incidence,
        coalesce(sum(covariance_step) over ({{ before }}), 0) as covariance_before,
        coalesce(sum(own_jump) over ({{ to_come }}), 0) as own_to_come,
        coalesce(sum(other_jump) over ({{ to_come }}), 0) + min(survival) over ({{ partition | trim }}) as rest_to_come
    from jumps
),

variance_steps as (
    select
        {{ row_key }}, incidence, survival + other_incidence as complement, own_to_come, greenwood_sum,
        own_jump * (2 * covariance_before + own_jump * greenwood_before + survival_before * (1 - own_hazard) * one_of_them)
            as variance_step,
        (own_hazard * rest_to_come * rest_to_come + other_hazard * own_to_come * own_to_come) * one_of_those_left
            + own_hazard * other_hazard * survival_before * survival_before * one_of_them as square_step,
        (own_hazard * rest_to_come - other_hazard * own_to_come) * one_of_those_left as cross_step
    from incidences
),

-- two ways to write one variance: the second is for incidences near 1, where the first is a difference of larger numbers
variances as (
    select
        {{ row_key }}, incidence, complement,
        lead(at_risk) over ({{ partition }}order by duration) as next_at_risk,
        lead(duration) over ({{ partition }}order by duration) as next_duration,
        case
            when complement >= 0.004 then sum(variance_step) over ({{ so_far }})
            else
                sum(square_step) over ({{ so_far }})
                + 2 * own_to_come * sum(cross_step) over ({{ so_far }})
                + own_to_come * own_to_come * greenwood_sum
        end as variance
    from variance_steps
),

figures as (
    select
        {{ row_key }}, next_at_risk, next_duration, incidence,
        case when incidence = 0 then 2 when complement = 0 then 0 else 1 end as stage,
        sqrt(greatest(0, variance)) as root_of_variance,
        case when incidence > 0 then sqrt(greatest(0, variance)) / incidence else 0 end as relative_error,
        case
            when incidence <= 0 or complement <= 0 then -1
            when complement < 0.01 then {{ spellcurve._log_of_share_left('complement', '1', '(complement / (2 - complement))') }}
            else ln(incidence)
        end as log_incidence,
        -- a share strictly between 0 and 1 stands in where the bounds are not used
        case when incidence <= 0 or complement <= 0 or incidence >= 1 then 0.5e0 else incidence end as inner_incidence
    from variances
),

figures_with_bounds as (
    select
        {{ row_key }}, next_at_risk, next_duration,
        case when stage = 0 then 1 else incidence end as incidence,
        case stage when 1 then root_of_variance when 2 then 0 end as std_error,
        {%- for name, side in [('incidence_lower', -1), ('incidence_upper', 1)] %}
        case stage
            when 1 then {{ spellcurve._survival_bound(interval_scale, 'inner_incidence', 'log_incidence', 'relative_error', z, side) }}
            when 2 then 0
        end as {{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from figures
)
    {%- endset -%}

    {%- set estimates = ['incidence', 'std_error', 'incidence_lower', 'incidence_upper'] -%}
    {%- set body -%}
with {{ ctes }},

{% if grid == 'steps' -%}
rows_wanted as (
    select
        {{ each_group }}cause, duration, at_risk, events, {{ estimates | join(', ') }}
    from figures_with_bounds
    where is_step = 1{% if horizon is not none %} and duration <= {{ horizon }}{% endif %}
)
{%- else -%}
{{ spellcurve._repeated_rows('units', 'figures_with_bounds', 'coalesce(next_duration, duration + 1) - duration') }},

rows_wanted as (
    select
        {{ each_group }}cause,
        duration + units_on as duration,
        case when units_on = 0 then at_risk else next_at_risk end as at_risk,
        case when units_on = 0 then events else 0 end as events,
        {{ estimates | join(', ') }}
    from units
    {%- if horizon is not none %}
    where duration + units_on <= {{ horizon }}
    {%- endif %}
)
{%- endif %}

select
    {{ spellcurve._aliases_as(groups, by) }}cause,
    {{ spellcurve._integer('duration') }} as duration,
    {{ spellcurve._published_columns(['at_risk', 'events'], estimates, minimum_at_risk, small_counts, weights) }}
    {%- if others == 'censored' %},
    {{ spellcurve._as_text("'censored'") }} as others
    {%- endif %}
from rows_wanted
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'by': by, 'confidence': confidence, 'interval_scale': interval_scale, 'horizon': horizon, 'grid': grid,
            'minimum_at_risk': minimum_at_risk, 'small_counts': small_counts, 'weights': weights, 'causes': causes, 'others': others
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
