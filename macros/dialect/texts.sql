{# A text literal. Some warehouses take a backslash in it for an escape, and know no other way to write a quote. #}

{% macro _text(value) %}
    {{ return(adapter.dispatch('_text', 'spellcurve')(value)) }}
{% endmacro %}

{% macro default___text(value) %}
    {{ return("'" ~ (value | string).replace("'", "''") ~ "'") }}
{% endmacro %}

{% macro _text_with_backslashes(value) %}
    {{ return("'" ~ (value | string).replace("\\", "\\\\").replace("'", "\\'") ~ "'") }}
{% endmacro %}

{% macro spark___text(value) %}
    {{ return(spellcurve._text_with_backslashes(value)) }}
{% endmacro %}

{% macro bigquery___text(value) %}
    {{ return(spellcurve._text_with_backslashes(value)) }}
{% endmacro %}

{% macro snowflake___text(value) %}
    {{ return(spellcurve._text_with_backslashes(value)) }}
{% endmacro %}

{% macro clickhouse___text(value) %}
    {{ return(spellcurve._text_with_backslashes(value)) }}
{% endmacro %}

{# A backslash escapes there as well, though it inherits PostgreSQL's macros. #}
{% macro redshift___text(value) %}
    {{ return("'" ~ (value | string).replace("\\", "\\\\").replace("'", "''") ~ "'") }}
{% endmacro %}
