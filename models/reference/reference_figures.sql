{#
    One row per data set, group and duration with the figures of its curve, and one with a null duration
    for the figures of the whole curve. A null group is the curve of all spells of the data set.
#}
{%- set curves = [
    ('remission', 'reference_remission_curve', 'arm'),
    ('eight_observations', 'reference_eight_observations_curve', none),
    ('two_samples', 'reference_two_samples_curve', 'sample_name'),
    ('two_samples', 'reference_two_samples_overall_curve', none),
    ('maintenance', 'reference_maintenance_curve', 'arm'),
    ('channing_house', 'reference_channing_house_curve', 'sex'),
    ('aids_cohort', 'reference_aids_cohort_curve', none),
    ('lung_cancer', 'reference_lung_cancer_curve', 'sex'),
    ('lung_cancer', 'reference_lung_cancer_overall_curve', none),
    ('fly_lifetimes', 'reference_fly_lifetimes_curve', 'strain'),
    ('fly_lifetimes', 'reference_fly_lifetimes_overall_curve', none),
] -%}

{#- Just above one half: a product of logarithms can land a hair above a level which it meets exactly. -#}
{%- set one_half = spellcurve._double('0.5000000005') -%}
{%- set no_figure = spellcurve._double('null') -%}

with

curve_rows as (
    {%- for data_set, curve, group_column in curves %}
    select
        '{{ data_set }}' as data_set,
        {{ spellcurve._as_text(group_column if group_column else 'null') }} as group_value,
        duration,
        at_risk,
        events,
        survival,
        std_error,
        survival_lower,
        survival_upper,
        cumulative_hazard,
        cumulative_hazard_std_error
    from {{ ref(curve) }}
    {%- if not loop.last %}

    union all
    {% endif %}
    {%- endfor %}
),

figures_of_whole_curves as (
    select
        data_set,
        group_value,
        sum(events) as total_events,
        min(case when survival <= {{ one_half }} then duration end) as median_duration,
        min(case when survival_lower <= {{ one_half }} then duration end) as median_lower,
        min(case when survival_upper <= {{ one_half }} then duration end) as median_upper
    from curve_rows
    group by data_set, group_value
)

select
    data_set,
    group_value,
    duration,
    at_risk,
    survival,
    std_error,
    survival_lower,
    survival_upper,
    cumulative_hazard,
    cumulative_hazard_std_error,
    {{ no_figure }} as total_events,
    {{ no_figure }} as median_duration,
    {{ no_figure }} as median_lower,
    {{ no_figure }} as median_upper
from curve_rows

union all

select
    data_set,
    group_value,
    {{ spellcurve._integer('null') }} as duration,
    {{ spellcurve._integer('null') }} as at_risk,
    {{ no_figure }} as survival,
    {{ no_figure }} as std_error,
    {{ no_figure }} as survival_lower,
    {{ no_figure }} as survival_upper,
    {{ no_figure }} as cumulative_hazard,
    {{ no_figure }} as cumulative_hazard_std_error,
    {{ spellcurve._double('total_events') }} as total_events,
    {{ spellcurve._double('median_duration') }} as median_duration,
    {{ spellcurve._double('median_lower') }} as median_lower,
    {{ spellcurve._double('median_upper') }} as median_upper
from figures_of_whole_curves
