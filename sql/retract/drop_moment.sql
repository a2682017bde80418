-- purpose: take back what one batch wrote into moment
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: moment
delete from moment
where batch_id = $batch_id
