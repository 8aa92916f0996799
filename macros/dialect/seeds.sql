{#
    dbt-spark's session method loads an empty cell of a seed as the text None; here it is null. In force where this package is run
    itself, and in a project whose dispatch setting lists it before dbt.
#}
{% macro spark__load_csv_rows(model, agate_table) %}
    {%- set overridden = model['config'].get('column_types', {}) -%}
    {%- set statements = [] -%}
    {%- for chunk in agate_table.rows | batch(get_batch_size()) -%}
        {%- set rows = [] -%}
        {%- for row in chunk -%}
            {%- set cells = [] -%}
            {%- for name in agate_table.column_names -%}
                {%- set type = overridden.get(name, adapter.convert_type(agate_table, loop.index0)) -%}
                {%- set cell = row[loop.index0] -%}
                {%- set value = 'null' if cell is none else (cell | string if cell is number else spellcurve._text(cell)) -%}
                {%- do cells.append('cast(' ~ value ~ ' as ' ~ type ~ ')') -%}
            {%- endfor -%}
            {%- do rows.append('(' ~ cells | join(', ') ~ ')') -%}
        {%- endfor -%}
        {%- set statement = 'insert into ' ~ this.render() ~ ' values ' ~ rows | join(', ') -%}
        {%- do adapter.add_query(statement, abridge_sql_log=true) -%}
        {%- do statements.append(statement) -%}
    {%- endfor -%}
    {{ return(statements[0]) }}
{% endmacro %}
