{#
    One row for each figure that could have been printed: of a curve, a life table, a read-out or a test, by data set, group and
    duration. The group of an incidence is its cause; a null group stands for all spells of the data set together, and a null
    duration for a figure of the whole. Each table is read once and crossed with the names of its figures.
#}
{%- set of_curves = [
    'at_risk', 'hazard', 'survival', 'std_error', 'survival_lower', 'survival_upper', 'cumulative_hazard', 'cumulative_hazard_std_error'
] -%}
{%- set of_quantiles = {'median': 'duration', 'median_lower': 'duration_lower', 'median_upper': 'duration_upper'} -%}
{%- set of_means = {'restricted_mean': 'restricted_mean', 'restricted_mean_std_error': 'std_error'} -%}
{%- set of_log_rank_tests = {'log_rank_statistic': 'statistic', 'log_rank_p_value': 'p_value'} -%}

{%- set tables = [] -%}
{%- for data_set, curve, group in [
    ('remission', 'remission', 'arm'),
    ('eight_observations', 'eight_observations', none),
    ('two_samples', 'two_samples', 'sample_name'),
    ('two_samples', 'two_samples_overall', none),
    ('maintenance', 'maintenance', 'arm'),
    ('channing_house', 'channing_house', 'sex'),
    ('aids_cohort', 'aids_cohort', none),
    ('lung_cancer', 'lung_cancer', 'sex'),
    ('lung_cancer', 'lung_cancer_overall', none),
    ('fly_lifetimes', 'fly_lifetimes', 'strain'),
    ('fly_lifetimes', 'fly_lifetimes_overall', none),
    ('diesel_fans', 'diesel_fans', none),
] -%}
    {%- do tables.append({'data_set': data_set, 'table': curve ~ '_curve', 'group': group, 'at': 'duration', 'figures': of_curves}) -%}
    {%- do tables.append({'data_set': data_set, 'table': curve ~ '_curve', 'group': group, 'figures': {'total_events': 'sum(events)'}}) -%}
{%- endfor -%}
{%- for data_set, readout, group in [
    ('remission', 'remission', 'arm'),
    ('maintenance', 'maintenance', 'arm'),
    ('lung_cancer', 'lung_cancer', 'sex'),
    ('lung_cancer', 'lung_cancer_overall', none),
    ('fly_lifetimes', 'fly_lifetimes_overall', none),
] -%}
    {%- do tables.append({'data_set': data_set, 'table': readout ~ '_quantiles', 'group': group, 'figures': of_quantiles}) -%}
{%- endfor -%}
{%- for data_set, readout, group in [
    ('remission', 'remission', 'arm'),
    ('maintenance', 'maintenance', 'arm'),
    ('lung_cancer', 'lung_cancer_overall', none),
] -%}
    {%- do tables.append({'data_set': data_set, 'table': readout ~ '_means', 'group': group, 'at': 'horizon', 'figures': of_means}) -%}
{%- endfor -%}
{%- for data_set in ['remission', 'maintenance', 'lung_cancer', 'fly_lifetimes'] -%}
    {%- do tables.append({
        'data_set': data_set, 'table': data_set ~ '_log_rank', 'where': "comparison = 'all groups'", 'figures': of_log_rank_tests
    }) -%}
    {%- for side in ['a', 'b'] -%}
        {%- do tables.append({
            'data_set': data_set, 'table': data_set ~ '_log_rank', 'group': 'group_' ~ side, 'where': "comparison <> 'all groups'",
            'figures': {'observed_events': 'observed_' ~ side, 'expected_events': 'expected_' ~ side}
        }) -%}
    {%- endfor -%}
{%- endfor -%}
{%- do tables.append({'data_set': 'remission', 'table': 'remission_gehan', 'figures': {'gehan_statistic': 'statistic'}}) -%}
{%- do tables.append({
    'data_set': 'kidney_cancer', 'table': 'kidney_cancer_table', 'at': 'from_duration',
    'figures': ['entering', 'exposed', 'hazard_share', 'survival', 'std_error']
}) -%}
{#- printed at round durations, between which nothing happens: the last row until then -#}
{%- for duration in [1000, 2000, 3000, 4000] -%}
    {%- do tables.append({
        'data_set': 'melanoma', 'table': 'melanoma_incidence', 'group': 'cause', 'last_until': duration,
        'figures': {'incidence': 'incidence', 'incidence_std_error': 'std_error'}
    }) -%}
{%- endfor -%}
{%- for cause, test in [('melanoma', 'gray'), ('other', 'gray_other')] -%}
    {%- do tables.append({
        'data_set': 'melanoma', 'table': 'melanoma_' ~ test, 'group': "'" ~ cause ~ "'", 'figures': {'gray_statistic': 'statistic'}
    }) -%}
{%- endfor -%}
{%- do tables.append({
    'data_set': 'valve_seats', 'table': 'valve_seats_counts', 'at': 'duration', 'figures': ['mean_count', 'std_error']
}) -%}

with

{% for table in tables -%}
{%- set relation = ref('reference_' ~ table.table) -%}
{%- set group = spellcurve._as_text(table.group if table.group else 'null') -%}
{%- set names = table.figures if table.figures is mapping else {} -%}
{%- set summed = 'total_events' in table.figures -%}
figures_{{ loop.index }} as (
    select
        '{{ table.data_set }}' as data_set,
        {{ group }} as group_value,
        figures.figure,
        {{ spellcurve._integer(table.at or table.last_until or 'null') }} as duration,
        {% if table.figures | length > 1 -%}
        case figures.figure
            {%- for figure in table.figures %}
            when '{{ figure }}' then {{ spellcurve._double('rows_of_table.' ~ names.get(figure, figure)) }}
            {%- endfor %}
        end as computed_value
        {%- else -%}
        {{ spellcurve._double(names.values() | first) }} as computed_value
        {%- endif %}
    from
        {%- if table.last_until %} (
            select
                {{ table.group }}, {{ names.values() | join(', ') }},
                row_number() over (partition by {{ table.group }} order by duration desc) as rows_until_then
            from {{ relation }}
            where duration <= {{ table.last_until }}
        )
        {%- else %} {{ relation }}
        {%- endif %} as rows_of_table
    cross join (
        {%- for figure in table.figures %}
        select '{{ figure }}' as figure{{ ' union all' if not loop.last }}
        {%- endfor %}
    ) as figures
    {%- if table.last_until %}
    where rows_of_table.rows_until_then = 1
    {%- elif table.where %}
    where {{ table.where }}
    {%- endif %}
    {%- if summed %}
    group by {{ table.group ~ ', ' if table.group }}figures.figure
    {%- endif %}
){{ ',' if not loop.last }}

{% endfor -%}

{%- for table in tables %}
select data_set, group_value, figure, duration, computed_value
from figures_{{ loop.index }}
{%- if not loop.last %}

union all
{% endif %}
{%- endfor %}
