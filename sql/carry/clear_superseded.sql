-- purpose: mark the states that this batch replaces; they stay, so that it can be undone
-- grain:   one row per vehicle that has a state
-- params:  $batch_id
-- reads:   incoming (registered: vehicle varchar); writes: carry
update carry
set replaced_by = $batch_id
where replaced_by is null and vehicle in (select i.vehicle from incoming as i)
