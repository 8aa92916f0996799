{% macro _version() %}
    {{ return('0.1.0') }}
{% endmacro %}


{#
    One line, at the head of the SQL: what was computed, from which relation, with which options, by which version.
    The validator reads it. Slashes are escaped, so that no name can close the comment.
#}
{% macro _provenance(macro_name, inputs, options) %}
    {%- set record = {'macro': macro_name, 'version': spellcurve._version()} -%}
    {%- for name, relation in inputs.items() -%}
        {%- do record.update({name: relation | string}) -%}
    {%- endfor -%}
    {%- do record.update(options) -%}
    {{ return('/* spellcurve ' ~ tojson(record).replace('/', '\\/') ~ ' */') }}
{% endmacro %}
