-- purpose: give the rows that were added up the number of their month
-- grain:   one row per row
-- params:  $holder_id
-- reads:   nothing; writes: histogram
update histogram
set batch_id = $holder_id
where batch_id = -$holder_id
