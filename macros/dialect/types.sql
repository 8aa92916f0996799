{# Types. dbt's own float is 32 bits wide on some warehouses, and its timestamp carries a zone on others. #}

{% macro _double_type() %}
    {{ return(adapter.dispatch('_double_type', 'spellcurve')()) }}
{% endmacro %}

{% macro default___double_type() %}
    {{ return('double precision') }}
{% endmacro %}

{% macro duckdb___double_type() %}
    {{ return('double') }}
{% endmacro %}

{% macro spark___double_type() %}
    {{ return('double') }}
{% endmacro %}

{% macro trino___double_type() %}
    {{ return('double') }}
{% endmacro %}

{% macro athena___double_type() %}
    {{ return('double') }}
{% endmacro %}

{% macro bigquery___double_type() %}
    {{ return('float64') }}
{% endmacro %}

{% macro clickhouse___double_type() %}
    {{ return('Float64') }}
{% endmacro %}


{% macro _double(expression) %}
    {{ return('cast(' ~ expression ~ ' as ' ~ spellcurve._double_type() ~ ')') }}
{% endmacro %}


{% macro _integer(expression) %}
    {{ return('cast(' ~ expression ~ ' as ' ~ dbt.type_bigint() ~ ')') }}
{% endmacro %}


{% macro _as_text(expression) %}
    {{ return('cast(' ~ expression ~ ' as ' ~ dbt.type_string() ~ ')') }}
{% endmacro %}


{# A date and time of day without a zone. #}
{% macro _moment_type() %}
    {{ return(adapter.dispatch('_moment_type', 'spellcurve')()) }}
{% endmacro %}

{% macro default___moment_type() %}
    {{ return('timestamp') }}
{% endmacro %}

{% macro spark___moment_type() %}
    {{ return('timestamp_ntz') }}
{% endmacro %}

{% macro snowflake___moment_type() %}
    {{ return('timestamp_ntz') }}
{% endmacro %}

{% macro bigquery___moment_type() %}
    {{ return('datetime') }}
{% endmacro %}

{% macro trino___moment_type() %}
    {{ return('timestamp(6)') }}
{% endmacro %}

{% macro athena___moment_type() %}
    {{ return('timestamp(6)') }}
{% endmacro %}

{% macro clickhouse___moment_type() %}
    {{ return('DateTime64(6)') }}
{% endmacro %}


{# A moment as a table keeps it. #}
{% macro _moment_kept(expression) %}
    {{ return(adapter.dispatch('_moment_kept', 'spellcurve')(expression)) }}
{% endmacro %}

{% macro default___moment_kept(expression) %}
    {{ return(expression) }}
{% endmacro %}

{# Tables that are not Iceberg's keep milliseconds there. #}
{% macro athena___moment_kept(expression) %}
    {{ return('cast(' ~ expression ~ ' as timestamp(3))') }}
{% endmacro %}


{% macro _moment_literal(text) %}
    {{ return("cast('" ~ text ~ "' as " ~ spellcurve._moment_type() ~ ')') }}
{% endmacro %}


{% macro _date(expression) %}
    {{ return('cast(' ~ expression ~ ' as ' ~ spellcurve._date_type() ~ ')') }}
{% endmacro %}


{% macro _date_type() %}
    {{ return(adapter.dispatch('_date_type', 'spellcurve')()) }}
{% endmacro %}

{% macro default___date_type() %}
    {{ return('date') }}
{% endmacro %}

{# The plain Date there begins in 1970. #}
{% macro clickhouse___date_type() %}
    {{ return('Date32') }}
{% endmacro %}
