-- purpose: take back what one batch wrote into batch_count
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: batch_count
delete from batch_count
where batch_id = $batch_id
