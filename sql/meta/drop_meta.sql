-- purpose: forget one thing the store says of itself
-- grain:   one row
-- params:  $key
-- reads:   nothing; writes: meta
delete from meta
where key = $key
