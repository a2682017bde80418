-- purpose: take back what one batch wrote into carry
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: carry
delete from carry
where batch_id = $batch_id
