-- purpose: drop the spans of one batch
-- grain:   one row per span
-- params:  $batch_id
-- reads:   nothing; writes: span
delete from span
where batch_id = $batch_id
