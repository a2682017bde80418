-- purpose: read all that the store says of itself
-- grain:   one row per key
-- params:  none
-- reads:   meta; writes: nothing
select key, value
from meta
order by key
