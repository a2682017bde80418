-- purpose: take back what one batch wrote into batch
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: batch
delete from batch
where batch_id = $batch_id
