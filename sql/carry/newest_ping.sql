-- purpose: find the newest ping in the store, of batches in order
-- grain:   one row
-- params:  none
-- reads:   carry; writes: nothing
select
    max(greatest(
        case when c.has_last = 1 then c.t_us end, case when c.is_held = 1 then c.held_us end, list_max(c.waiting_us)
    )) as newest_us
from carry as c
where c.replaced_by is null
