-- purpose: find the vehicles that have a trip open, or a ping held or held back
-- grain:   one row per vehicle
-- params:  none
-- reads:   carry, carry_newest; writes: nothing
select c.vehicle
from carry_newest as n
join carry as c on c.vehicle = n.vehicle and c.batch_id = n.batch_id
where c.mode <> 0 or c.is_held = 1 or len(c.waiting_us) > 0
order by c.vehicle
