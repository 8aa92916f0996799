{#
    A window of all rows that share these columns, without order. Spark plans it sooner if the frame is written out; some others take no
    frame without an order.
#}

{% macro _throughout(items) %}
    {{ return(adapter.dispatch('_throughout', 'spellcurve')(items)) }}
{% endmacro %}

{% macro default___throughout(items) %}
    {{ return(spellcurve._partition_by(items) | trim) }}
{% endmacro %}

{% macro spark___throughout(items) %}
    {{ return(spellcurve._partition_by(items) ~ 'rows between unbounded preceding and unbounded following') }}
{% endmacro %}
