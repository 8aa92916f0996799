{# Words that cannot stand as a bare column name; a column only bears one if it was made with quotes. #}

{% macro _reserved_words() %}
    {{ return(adapter.dispatch('_reserved_words', 'spellcurve')()) }}
{% endmacro %}


{% macro default___reserved_words() %}
    {{ return([
        'all', 'analyse', 'analyze', 'and', 'any', 'array', 'as', 'asc', 'asymmetric', 'authorization', 'between', 'binary',
        'both', 'by', 'case', 'cast', 'check', 'collate', 'column', 'constraint', 'create', 'cross', 'cube', 'current',
        'current_date', 'current_time', 'current_timestamp', 'current_user', 'default', 'deferrable', 'delete', 'desc',
        'distinct', 'do', 'drop', 'else', 'end', 'except', 'exists', 'false', 'fetch', 'for', 'foreign', 'from', 'full',
        'grant', 'group', 'having', 'ilike', 'in', 'initially', 'inner', 'insert', 'intersect', 'interval', 'into', 'is',
        'join', 'lateral', 'leading', 'left', 'like', 'limit', 'natural', 'not', 'null', 'of', 'offset', 'on', 'only', 'or',
        'order', 'outer', 'over', 'partition', 'placing', 'primary', 'qualify', 'range', 'references', 'returning', 'right',
        'rollup', 'row', 'rows', 'select', 'session_user', 'set', 'similar', 'some', 'symmetric', 'table', 'then', 'to',
        'trailing', 'true', 'union', 'unique', 'update', 'user', 'using', 'values', 'verbose', 'when', 'where', 'window',
        'with'
    ]) }}
{% endmacro %}


{% macro duckdb___reserved_words() %}
    {{ return(spellcurve.default___reserved_words() + [
        'anti', 'asof', 'at', 'collation', 'columns', 'concurrently', 'describe', 'freeze', 'generated', 'glob', 'isnull', 'lambda',
        'map', 'notnull', 'overlaps', 'pivot', 'pivot_longer', 'pivot_wider', 'positional', 'semi', 'show', 'struct', 'summarize',
        'tablesample', 'try_cast', 'tuple', 'unpack', 'unpivot', 'variadic'
    ]) }}
{% endmacro %}
