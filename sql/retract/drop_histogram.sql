-- purpose: take back what one batch wrote into histogram
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: histogram
delete from histogram
where batch_id = $batch_id
