-- purpose: take back what one batch wrote into unfinished
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: unfinished
delete from unfinished
where batch_id = $batch_id
