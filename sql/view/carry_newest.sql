-- purpose: the batch whose state of a vehicle counts; older ones stay for one batch, so that it can be undone
-- grain:   one row per vehicle
-- params:  none
-- reads:   carry; writes: nothing
create view carry_newest as
select vehicle, max(batch_id) as batch_id
from carry
group by vehicle
