-- purpose: take back what one batch wrote into section
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: section
delete from section
where batch_id = $batch_id
