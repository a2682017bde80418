-- purpose: let the states that one batch replaced go on in the place of its own
-- grain:   one row per vehicle that had a state before the batch
-- params:  $batch_id
-- reads:   carry; writes: carry
update carry
set replaced_by = gone.replaced_by
from carry as gone
where carry.replaced_by = $batch_id and gone.vehicle = carry.vehicle and gone.batch_id = $batch_id
