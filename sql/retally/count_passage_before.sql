-- purpose: tell how far the row numbers of the passages set aside reach
-- grain:   one row
-- params:  none
-- reads:   passage_before; writes: nothing
select coalesce(max(rowid) + 1, 0)::bigint as n
from passage_before
