-- purpose: find the vehicles that have a trip open, or a ping held or held back
-- grain:   one row per vehicle
-- params:  none
-- reads:   carry; writes: nothing
select vehicle
from carry
where replaced_by is null and (mode <> 0 or is_held = 1 or len(waiting_us) > 0)
order by vehicle
