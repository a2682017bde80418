-- purpose: take back what one batch wrote into passage
-- grain:   one row per row taken back
-- params:  $batch_id
-- reads:   nothing; writes: passage
delete from passage
where batch_id = $batch_id
