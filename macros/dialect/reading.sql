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

{% macro default___read_moment(expression) %}
    {{ return('try_cast(' ~ expression ~ ' as ' ~ spellcurve._moment_type() ~ ')') }}
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
    {{ return('try_cast(' ~ expression ~ ' as ' ~ spellcurve._double_type() ~ ')') }}
{% endmacro %}

{% macro duckdb___read_number(expression) %}
    {%- set text = 'cast(' ~ expression ~ ' as varchar)' -%}
    {{ return(
        "case when typeof(" ~ expression ~ ") in ('TINYINT', 'SMALLINT', 'INTEGER', 'BIGINT', 'UTINYINT', 'USMALLINT',"
        ~ " 'UINTEGER', 'UBIGINT', 'HUGEINT') then try_cast(" ~ expression ~ " as double)"
        ~ " when regexp_matches(" ~ text ~ ", '" ~ spellcurve._number_pattern() ~ "') then try_cast(" ~ text ~ " as double) end"
    ) }}
{% endmacro %}
