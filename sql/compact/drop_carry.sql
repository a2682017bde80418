-- purpose: drop the states that only undoing the given batches would ask for
-- grain:   one row per state
-- params:  none
-- reads:   incoming (registered: batch_id bigint); writes: carry
delete from carry
where replaced_by in (select i.batch_id from incoming as i)
