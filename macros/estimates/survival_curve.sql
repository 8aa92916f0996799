{% macro survival_curve(
    spells, by=[], confidence=0.95, interval_scale='log-log', horizon=none, grid='steps', minimum_at_risk=0, small_counts='keep',
    weights='whole', simultaneous='none'
) %}
    {%- do spellcurve._check_call(
        'survival_curve',
        {'spells': spells},
        ['spells', 'by', 'confidence', 'interval_scale', 'horizon', 'grid', 'minimum_at_risk', 'small_counts', 'weights',
         'simultaneous'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('survival_curve', 'spellcurve')(
        spells, by, confidence, interval_scale, horizon, grid, minimum_at_risk, small_counts, weights, simultaneous
    )) }}
{% endmacro %}


{% macro _survival_curve_columns() %}
    {{ return([
        'duration', 'at_risk', 'events', 'censored', 'hazard', 'survival', 'std_error', 'survival_lower', 'survival_upper',
        'cumulative_hazard', 'cumulative_hazard_std_error'
    ]) }}
{% endmacro %}


{# Which band is wanted: true means equal precision. Its critical values come from a formula for small chances. #}
{% macro _check_simultaneous(caller_name, simultaneous, confidence) %}
    {%- set band = simultaneous -%}
    {%- if simultaneous is boolean -%}
        {%- set band = 'equal-precision' if simultaneous else 'none' -%}
    {%- endif -%}
    {%- do spellcurve._check_choice(caller_name, 'simultaneous', band, ['none', 'equal-precision', 'hall-wellner']) -%}
    {%- if band != 'none' and confidence < 0.8 -%}
        {%- do spellcurve._fail(caller_name, 'confidence is ' ~ confidence ~ '; with simultaneous bands it must be at least 0.8.') -%}
    {%- endif -%}
    {{ return(band) }}
{% endmacro %}


{% macro default__survival_curve(
    spells, by, confidence, interval_scale, horizon, grid, minimum_at_risk, small_counts, weights, simultaneous
) %}
    {%- set caller_name = 'survival_curve' -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, spellcurve._survival_curve_columns()) -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- do spellcurve._check_choice(caller_name, 'interval_scale', interval_scale, spellcurve._interval_scales()) -%}
    {%- do spellcurve._check_rows_wanted(caller_name, grid, horizon, minimum_at_risk, small_counts) -%}
    {%- do spellcurve._check_choice(caller_name, 'weights', weights, ['whole', 'fractional']) -%}
    {%- set simultaneous = spellcurve._check_simultaneous(caller_name, simultaneous, confidence) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set is_band = simultaneous != 'none' -%}
    {%- set z = 1.0 if is_band else spellcurve._normal_quantile(0.5 + confidence / 2) -%}
    {%- set reach = 'band_reach' if is_band else 'relative_error' -%}
    {%- set own_columns = each_group ~ 'duration, at_risk, events, censored, is_step, hazard' -%}
    {%- set row_columns = own_columns ~ (', next_at_risk, next_duration' if grid == 'every' else '') -%}

    {%- set ctes -%}
{{ spellcurve._risk_sets(spells, by, horizon, weights) }},

hazards as (
    select
        *,
        case when at_risk > 0 then events / at_risk else 0 end as hazard,
        case when events > 0 and events >= at_risk * (1 - 1e-12) then 1 else 0 end as takes_all,
        case when events > 0 then events / (2 * at_risk - events) else 0 end as thin_share
    from risk_sets
),

steps_of_curve as (
    select
        *,
        {{ spellcurve._log_step('events', 'at_risk') }} as log_step,
        case when events > 0 and takes_all = 0 then hazard / (at_risk - events) else 0 end as greenwood_step,
        case when events > 0 then hazard / at_risk else 0 end as hazard_variance_step
    from hazards
),

running_sums as (
    select
        {{ own_columns }},
        {%- if grid == 'every' %}
        lead(at_risk) over ({{ partition }}order by duration) as next_at_risk,
        lead(duration) over ({{ partition }}order by duration) as next_duration,
        {%- endif %}
        {%- set so_far = partition ~ 'order by duration rows between unbounded preceding and current row' %}
        sum(log_step) over ({{ so_far }}) as log_survival,
        sum(greenwood_step) over ({{ so_far }}) as greenwood_sum,
        sum(hazard) over ({{ so_far }}) as cumulative_hazard,
        sum(hazard_variance_step) over ({{ so_far }}) as cumulative_hazard_variance
    from steps_of_curve
),
{% if is_band %}
{{ spellcurve._rows_with_reach('running_sums', simultaneous, confidence, groups, horizon) }},
{% endif %}
figures as (
    select
        {{ row_columns }}, log_survival,
        case
            when {{ spellcurve._is_nothing_left('log_survival') }} then 0
            when log_survival < 0 then 1
            else 2
        end as stage,
        {{ spellcurve._survival_of('log_survival') }} as survival,
        sqrt(greenwood_sum) as relative_error,
        {%- if is_band %}
        band_reach,
        {%- endif %}
        cumulative_hazard,
        sqrt(cumulative_hazard_variance) as cumulative_hazard_std_error
    from {{ 'rows_with_reach' if is_band else 'running_sums' }}
),

figures_with_bounds as (
    select
        {{ row_columns }}, survival,
        case stage when 1 then survival * relative_error when 2 then 0 end as std_error,
        case stage
            when 1 then {{ spellcurve._survival_bound(interval_scale, 'survival', 'log_survival', reach, z, -1) }}
            when 2 then 1
        end as survival_lower,
        case stage
            when 1 then {{ spellcurve._survival_bound(interval_scale, 'survival', 'log_survival', reach, z, 1) }}
            when 2 then 1
        end as survival_upper,
        cumulative_hazard,
        cumulative_hazard_std_error
    from figures
)
    {%- endset -%}

    {%- set estimates = [
        'hazard', 'survival', 'std_error', 'survival_lower', 'survival_upper', 'cumulative_hazard', 'cumulative_hazard_std_error'
    ] -%}
    {%- set body -%}
with {{ ctes }}{{ ',' if grid == 'every' }}

{% if grid == 'every' -%}
{{ spellcurve._repeated_rows('units', 'figures_with_bounds', 'coalesce(next_duration, duration + 1) - duration') }},

rows_on_grid as (
    select
        {{ each_group }}duration + units_on as duration,
        case when units_on = 0 then at_risk else next_at_risk end as at_risk,
        case when units_on = 0 then events else 0 end as events,
        case when units_on = 0 then censored else 0 end as censored,
        case when units_on = 0 then hazard else 0 end as hazard,
        survival, std_error, survival_lower, survival_upper, cumulative_hazard, cumulative_hazard_std_error
    from units
    {%- if horizon is not none %}
    where duration + units_on <= {{ horizon }}
    {%- endif %}
)

{% endif -%}
select
    {{ spellcurve._aliases_as(groups, by) }}{{ spellcurve._integer('duration') }} as duration,
    {{ spellcurve._published_columns(['at_risk', 'events', 'censored'], estimates, minimum_at_risk, small_counts, weights) }}
{%- if grid == 'every' %}
from rows_on_grid
{%- else %}
from figures_with_bounds
where is_step = 1{% if horizon is not none %} and duration <= {{ horizon }}{% endif %}
{%- endif %}
    {%- endset -%}

    {%- set options = {
        'by': by, 'confidence': confidence, 'interval_scale': interval_scale, 'horizon': horizon, 'grid': grid,
        'minimum_at_risk': minimum_at_risk, 'small_counts': small_counts, 'weights': weights
    } -%}
    {%- if is_band -%}
        {%- do options.update({'simultaneous': simultaneous}) -%}
    {%- endif -%}
    {{ return(spellcurve._provenance(caller_name, {'spells': spells}, options) ~ '\n' ~ body) }}
{% endmacro %}
