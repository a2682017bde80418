-- purpose: take back what one batch wrote into trip
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: trip
delete from trip
where batch_id = $batch_id
