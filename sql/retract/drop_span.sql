-- purpose: take back what one batch wrote into span
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: span
delete from span
where batch_id = $batch_id
