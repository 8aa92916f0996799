{# How many groups a test of groups is prepared for, unless told: each one more is a step that the engine has to plan. #}
{% macro _most_groups() %}
    {{ return(adapter.dispatch('_most_groups', 'spellcurve')()) }}
{% endmacro %}

{% macro default___most_groups() %}
    {{ return(50) }}
{% endmacro %}

{# Databricks goes over a plan 100 times at most before it gives up, unless spark.sql.analyzer.maxIterations says more. #}
{% macro databricks___most_groups() %}
    {{ return(20) }}
{% endmacro %}
