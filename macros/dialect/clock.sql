{#
    Arithmetic on moments. The warehouses' own week, month and hour differences disagree (some count the boundaries crossed,
    some round up), so only days and microseconds are asked of them, and the other units are built from those.
#}

{# Calendar days from one moment's date to the other's. #}
{% macro _days_between(earlier, later) %}
    {{ return(adapter.dispatch('_days_between', 'spellcurve')(earlier, later)) }}
{% endmacro %}

{% macro default___days_between(earlier, later) %}
    {{ return('(cast(' ~ later ~ ' as date) - cast(' ~ earlier ~ ' as date))') }}
{% endmacro %}

{% macro spark___days_between(earlier, later) %}
    {{ return('datediff(cast(' ~ later ~ ' as date), cast(' ~ earlier ~ ' as date))') }}
{% endmacro %}

{% macro snowflake___days_between(earlier, later) %}
    {{ return('datediff(day, cast(' ~ earlier ~ ' as date), cast(' ~ later ~ ' as date))') }}
{% endmacro %}

{% macro bigquery___days_between(earlier, later) %}
    {{ return('date_diff(cast(' ~ later ~ ' as date), cast(' ~ earlier ~ ' as date), day)') }}
{% endmacro %}

{% macro trino___days_between(earlier, later) %}
    {{ return("date_diff('day', cast(" ~ earlier ~ ' as date), cast(' ~ later ~ ' as date))') }}
{% endmacro %}

{% macro athena___days_between(earlier, later) %}
    {{ return(spellcurve.trino___days_between(earlier, later)) }}
{% endmacro %}

{% macro clickhouse___days_between(earlier, later) %}
    {{ return("dateDiff('day', cast(" ~ earlier ~ ' as Date32), cast(' ~ later ~ ' as Date32))') }}
{% endmacro %}


{% macro _microseconds_between(earlier, later) %}
    {{ return(adapter.dispatch('_microseconds_between', 'spellcurve')(earlier, later)) }}
{% endmacro %}

{% macro default___microseconds_between(earlier, later) %}
    {{ return('cast(extract(epoch from (' ~ later ~ ' - ' ~ earlier ~ ')) * 1000000 as bigint)') }}
{% endmacro %}

{% macro duckdb___microseconds_between(earlier, later) %}
    {{ return('(epoch_us(' ~ later ~ ') - epoch_us(' ~ earlier ~ '))') }}
{% endmacro %}

{% macro snowflake___microseconds_between(earlier, later) %}
    {{ return('datediff(microsecond, ' ~ earlier ~ ', ' ~ later ~ ')') }}
{% endmacro %}

{% macro redshift___microseconds_between(earlier, later) %}
    {{ return('datediff(microsecond, ' ~ earlier ~ ', ' ~ later ~ ')') }}
{% endmacro %}

{% macro bigquery___microseconds_between(earlier, later) %}
    {{ return('datetime_diff(' ~ later ~ ', ' ~ earlier ~ ', microsecond)') }}
{% endmacro %}

{# To the millisecond: it has no finer difference. #}
{% macro trino___microseconds_between(earlier, later) %}
    {{ return("1000 * date_diff('millisecond', " ~ earlier ~ ', ' ~ later ~ ')') }}
{% endmacro %}

{% macro athena___microseconds_between(earlier, later) %}
    {{ return(spellcurve.trino___microseconds_between(earlier, later)) }}
{% endmacro %}

{% macro clickhouse___microseconds_between(earlier, later) %}
    {{ return("dateDiff('microsecond', " ~ earlier ~ ', ' ~ later ~ ')') }}
{% endmacro %}

{# From days and times of day: Spark's own differences go through the session's time zone, and its hours round up. #}
{% macro spark___microseconds_between(earlier, later) %}
    {{ return(
        '(86400000000L * ' ~ spellcurve._days_between(earlier, later) ~ ' + ' ~ spellcurve._microseconds_into_day(later) ~ ' - '
        ~ spellcurve._microseconds_into_day(earlier) ~ ')'
    ) }}
{% endmacro %}

{% macro _microseconds_into_day(moment) %}
    {{ return(
        '(3600000000L * hour(' ~ moment ~ ') + 60000000L * minute(' ~ moment ~ ') + 1000000L * second(' ~ moment
        ~ ") + cast(date_format(" ~ moment ~ ", 'SSSSSS') as bigint))"
    ) }}
{% endmacro %}


{# A moment moved by a number of days, hours or minutes that is known when the model compiles. #}
{% macro _moment_plus(moment, amount, unit) %}
    {{ return(adapter.dispatch('_moment_plus', 'spellcurve')(moment, amount, unit)) }}
{% endmacro %}

{% macro default___moment_plus(moment, amount, unit) %}
    {{ return('(' ~ moment ~ " + interval '" ~ amount ~ ' ' ~ unit ~ "')") }}
{% endmacro %}

{% macro snowflake___moment_plus(moment, amount, unit) %}
    {{ return('dateadd(' ~ unit ~ ', ' ~ amount ~ ', ' ~ moment ~ ')') }}
{% endmacro %}

{% macro bigquery___moment_plus(moment, amount, unit) %}
    {{ return('datetime_add(' ~ moment ~ ', interval ' ~ amount ~ ' ' ~ unit ~ ')') }}
{% endmacro %}

{% macro trino___moment_plus(moment, amount, unit) %}
    {{ return('date_add(' ~ "'" ~ unit ~ "', " ~ amount ~ ', ' ~ moment ~ ')') }}
{% endmacro %}

{% macro athena___moment_plus(moment, amount, unit) %}
    {{ return(spellcurve.trino___moment_plus(moment, amount, unit)) }}
{% endmacro %}

{% macro clickhouse___moment_plus(moment, amount, unit) %}
    {{ return('(' ~ moment ~ ' + interval ' ~ amount ~ ' ' ~ unit ~ ')') }}
{% endmacro %}
