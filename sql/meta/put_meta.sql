-- purpose: write one thing the store says of itself
-- grain:   one row per key
-- params:  $key, $value
-- reads:   nothing; writes: meta
insert into meta (key, value)
values ($key, $value)
on conflict (key) do update set value = excluded.value
