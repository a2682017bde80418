-- purpose: note that the counts of some batches stand under the number of one of them
-- grain:   one row per batch
-- params:  $holder_id
-- reads:   incoming (registered: batch_id bigint); writes: batch
update batch
set rolled_into = $holder_id
where batch_id in (select i.batch_id from incoming as i)
