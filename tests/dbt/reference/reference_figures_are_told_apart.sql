{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

-- a published figure must meet one computed figure, not several
select data_set, group_value, figure, duration, count(*) as copies
from {{ ref('reference_figures') }}
group by data_set, group_value, figure, duration
having count(*) > 1
