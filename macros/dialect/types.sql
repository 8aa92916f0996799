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


{% macro _moment_literal(text) %}
    {{ return("cast('" ~ text ~ "' as " ~ spellcurve._moment_type() ~ ')') }}
{% endmacro %}


{% macro _date(expression) %}
    {{ return('cast(' ~ expression ~ ' as date)') }}
{% endmacro %}
