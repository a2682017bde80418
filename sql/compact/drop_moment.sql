-- purpose: drop the rows of some batches that were added up
-- grain:   one row per row dropped
-- params:  none
-- reads:   incoming (registered: batch_id bigint); writes: moment
delete from moment
where batch_id in (select i.batch_id from incoming as i)
