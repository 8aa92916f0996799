{# Reading what a source keeps: null where it cannot be read, never an error. #}

{#
    A moment from a date, a timestamp or ISO 8601 text (2026-03-01, 2026-03-01 14:05, 2026-03-01T14:05:09.5).
    A column with a time zone is read on the wall clock of the session's zone.
#}
{% macro _read_moment(expression) %}
    {{ return(adapter.dispatch('_read_moment', 'spellcurve')(expression)) }}
{% endmacro %}

{% macro _iso_moment_pattern() %}
    {{ return('^[0-9]{4}-[0-9]{2}-[0-9]{2}([ T]([01][0-9]|2[0-3]):[0-5][0-9](:[0-5][0-9]([.][0-9]{1,6})?)?)?$') }}
{% endmacro %}

{# Where nothing like try_cast exists the text is looked at first: its form, then whether the calendar has that day. #}
{% macro default___read_moment(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {%- set year, month, day = [
        'cast(substr(' ~ text ~ ', 1, 4) as integer)', 'cast(substr(' ~ text ~ ', 6, 2) as integer)',
        'cast(substr(' ~ text ~ ', 9, 2) as integer)'
    ] -%}
    {{ return(
        "case when " ~ text ~ " ~ '" ~ spellcurve._iso_moment_pattern() ~ "' then case when " ~ year ~ " > 0 and " ~ month
        ~ " between 1 and 12 and " ~ day ~ " between 1 and case when " ~ month ~ " in (4, 6, 9, 11) then 30 when " ~ month
        ~ " <> 2 then 31 when mod(" ~ year ~ ", 4) = 0 and (mod(" ~ year ~ ", 100) <> 0 or mod(" ~ year
        ~ ", 400) = 0) then 29 else 28 end then cast(" ~ text ~ " as " ~ spellcurve._moment_type() ~ ") end end"
    ) }}
{% endmacro %}

{% macro postgres___read_moment(expression) %}
    {{ return(
        "case when pg_typeof(" ~ expression ~ ") in ('date'::regtype, 'timestamp'::regtype, 'timestamptz'::regtype) then cast("
        ~ spellcurve._as_text(expression) ~ " as timestamp) else " ~ spellcurve.default___read_moment(expression) ~ " end"
    ) }}
{% endmacro %}

{# It inherits PostgreSQL's macros, and knows no pg_typeof. #}
{% macro redshift___read_moment(expression) %}
    {{ return(spellcurve.default___read_moment(expression)) }}
{% endmacro %}

{% macro snowflake___read_moment(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return(
        "case when regexp_like(" ~ text ~ ", '" ~ spellcurve._iso_moment_pattern() ~ "') then try_cast(" ~ text ~ " as timestamp_ntz) end"
    ) }}
{% endmacro %}

{% macro bigquery___read_moment(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return(
        "case when regexp_contains(" ~ text ~ ", '" ~ spellcurve._iso_moment_pattern() ~ "') then safe_cast(" ~ text
        ~ " as datetime) end"
    ) }}
{% endmacro %}

{% macro trino___read_moment(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return(
        "case when regexp_like(" ~ text ~ ", '" ~ spellcurve._iso_moment_pattern() ~ "') then try_cast(replace(" ~ text
        ~ ", 'T', ' ') as " ~ spellcurve._moment_type() ~ ") end"
    ) }}
{% endmacro %}

{% macro athena___read_moment(expression) %}
    {{ return(spellcurve.trino___read_moment(expression)) }}
{% endmacro %}

{# A day that no calendar has is null only where the text has both a day and a time. #}
{% macro clickhouse___read_moment(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return(
        "case when match(" ~ text ~ ", '" ~ spellcurve._iso_moment_pattern() ~ "') and toString(toDate32OrNull(substring(" ~ text
        ~ ", 1, 10))) = substring(" ~ text ~ ", 1, 10) then parseDateTime64BestEffortOrNull(" ~ text ~ ", 6) end"
    ) }}
{% endmacro %}

{% macro spark___read_moment(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return(
        "case when " ~ text ~ " rlike '" ~ spellcurve._iso_moment_pattern() ~ "' then try_cast(" ~ text ~ " as timestamp_ntz) end"
    ) }}
{% endmacro %}

{% macro duckdb___read_moment(expression) %}
    {%- set text = 'cast(' ~ expression ~ ' as varchar)' -%}
    {{ return(
        "case when typeof(" ~ expression ~ ") in ('DATE', 'TIMESTAMP', 'TIMESTAMP WITH TIME ZONE', 'TIMESTAMP_S',"
        ~ " 'TIMESTAMP_MS', 'TIMESTAMP_NS') then try_cast(" ~ expression ~ " as timestamp)"
        ~ " when regexp_matches(" ~ text ~ ", '" ~ spellcurve._iso_moment_pattern() ~ "')"
        ~ " then try_cast(" ~ text ~ " as timestamp) end"
    ) }}
{% endmacro %}


{# A finite number from a number or from its text. #}
{% macro _read_number(expression) %}
    {{ return(adapter.dispatch('_read_number', 'spellcurve')(expression)) }}
{% endmacro %}

{% macro _number_pattern() %}
    {{ return('^[+-]?([0-9]+[.]?[0-9]*|[.][0-9]+)([eE][+-]?[0-9]{1,2})?$') }}
{% endmacro %}

{% macro default___read_number(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return(
        "case when " ~ text ~ " ~ '" ~ spellcurve._number_pattern() ~ "' then cast(" ~ text ~ " as " ~ spellcurve._double_type()
        ~ ") end"
    ) }}
{% endmacro %}

{% macro snowflake___read_number(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return("case when regexp_like(" ~ text ~ ", '" ~ spellcurve._number_pattern() ~ "') then try_cast(" ~ text ~ " as double precision) end") }}
{% endmacro %}

{% macro bigquery___read_number(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return(
        "case when regexp_contains(" ~ text ~ ", '" ~ spellcurve._number_pattern() ~ "') then safe_cast(" ~ text ~ " as float64) end"
    ) }}
{% endmacro %}

{% macro trino___read_number(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return("case when regexp_like(" ~ text ~ ", '" ~ spellcurve._number_pattern() ~ "') then try_cast(" ~ text ~ " as double) end") }}
{% endmacro %}

{% macro athena___read_number(expression) %}
    {{ return(spellcurve.trino___read_number(expression)) }}
{% endmacro %}

{% macro clickhouse___read_number(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return("case when match(" ~ text ~ ", '" ~ spellcurve._number_pattern() ~ "') then toFloat64OrNull(" ~ text ~ ") end") }}
{% endmacro %}

{% macro spark___read_number(expression) %}
    {%- set text = spellcurve._as_text(expression) -%}
    {{ return("case when " ~ text ~ " rlike '" ~ spellcurve._number_pattern() ~ "' then try_cast(" ~ text ~ " as double) end") }}
{% endmacro %}

{% macro duckdb___read_number(expression) %}
    {%- set text = 'cast(' ~ expression ~ ' as varchar)' -%}
    {{ return(
        "case when typeof(" ~ expression ~ ") in ('TINYINT', 'SMALLINT', 'INTEGER', 'BIGINT', 'UTINYINT', 'USMALLINT',"
        ~ " 'UINTEGER', 'UBIGINT', 'HUGEINT') then try_cast(" ~ expression ~ " as double)"
        ~ " when regexp_matches(" ~ text ~ ", '" ~ spellcurve._number_pattern() ~ "') then try_cast(" ~ text ~ " as double) end"
    ) }}
{% endmacro %}
