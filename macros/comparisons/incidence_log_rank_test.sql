{% macro incidence_log_rank_test(
    spells, between, causes, strata=[], weighting='log-rank', pairs='none', reference=none, by=[], adjustment='holm', confidence=0.95,
    most_groups=none
) %}
    {%- do spellcurve._check_call(
        'incidence_log_rank_test',
        {'spells': spells, 'between': between, 'causes': causes},
        ['spells', 'between', 'causes', 'strata', 'weighting', 'pairs', 'reference', 'by', 'adjustment', 'confidence', 'most_groups'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('incidence_log_rank_test', 'spellcurve')(
        spells, between, causes, strata, weighting, pairs, reference, by, adjustment, confidence, most_groups
    )) }}
{% endmacro %}


{# The log-rank test of spells in which every cause but those named is censoring. #}
{% macro default__incidence_log_rank_test(
    spells, between, causes, strata, weighting, pairs, reference, by, adjustment, confidence, most_groups
) %}
    {%- set caller_name = 'incidence_log_rank_test' -%}
    {%- set causes = spellcurve._checked_causes(caller_name, causes) -%}
    {%- set compared = spellcurve._compared(caller_name, between, strata, by, spellcurve._log_rank_test_columns()) -%}
    {%- set most_groups = spellcurve._most_groups() if most_groups is none else most_groups -%}
    {%- set columns = [] -%}
    {%- for name in compared.columns -%}{%- do columns.append(spellcurve._column(name)) -%}{%- endfor -%}
    {%- set of_causes -%}
(
        select
            {{ columns | join(', ') }}, entry, duration, weight,
            case when event = 1 and {{ spellcurve._is_of_causes(causes) }} then 1 else 0 end as event
        from {{ spells }}
    ) as spells_of_causes
    {%- endset -%}
    {%- set tested = spellcurve.log_rank_test(
        of_causes, between, strata, weighting, pairs, reference, by, adjustment, confidence, most_groups
    ) -%}
    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'between': between, 'causes': causes, 'strata': compared.strata, 'weighting': weighting, 'pairs': pairs,
            'reference': reference, 'by': compared.by, 'adjustment': adjustment, 'confidence': confidence, 'most_groups': most_groups
        }) ~ '\n' ~ tested[tested.index('*/') + 2:] | trim
    ) }}
{% endmacro %}


{# The causes whose events are looked at, as a list of texts. #}
{% macro _checked_causes(caller_name, causes) %}
    {%- if causes is mapping -%}
        {%- do spellcurve._fail(caller_name, 'causes is a mapping; it must be a cause or a list of causes.') -%}
    {%- endif -%}
    {%- set names = [] -%}
    {%- for cause, label in spellcurve._cause_labels(caller_name, causes) -%}{%- do names.append(cause) -%}{%- endfor -%}
    {{ return(names) }}
{% endmacro %}


{% macro _is_of_causes(causes) %}
    {{ return('coalesce(' ~ spellcurve._as_text('cause') ~ ", 'unknown') in (" ~ spellcurve._texts(causes) ~ ')') }}
{% endmacro %}
