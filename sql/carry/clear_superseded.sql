-- purpose: drop states that a later batch has replaced, before the next batch adds its own
-- grain:   one row per vehicle and batch dropped
-- params:  none
-- reads:   carry_newest; writes: carry
delete from carry
where batch_id < (select n.batch_id from carry_newest as n where n.vehicle = carry.vehicle)
