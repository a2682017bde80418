-- purpose: find the newest ping that some vehicles brought, used, held or held back; null: none was good
-- grain:   one row per asked vehicle that has a state
-- params:  none
-- reads:   incoming (registered: ix bigint, vehicle varchar), carry; writes: nothing
select
    i.ix, greatest(
        case when c.has_last = 1 then c.t_us end, case when c.is_held = 1 then c.held_us end, list_max(c.waiting_us)
    ) as newest_us
from incoming as i
join carry as c on c.vehicle = i.vehicle
where c.replaced_by is null
order by i.ix
