-- purpose: count what each batch gave
-- grain:   one row per batch, kind (passage, section, trip, or unfinished with its reason)
-- params:  none
-- reads:   passage, section, trip, unfinished; writes: nothing
select batch_id, 'passage' as kind, '' as reason, count(*) as n
from passage
group by batch_id
union all
select batch_id, 'section' as kind, '' as reason, count(*) as n
from section
group by batch_id
union all
select batch_id, 'trip' as kind, '' as reason, count(*) as n
from trip
group by batch_id
union all
select batch_id, 'unfinished' as kind, reason, count(*) as n
from unfinished
group by batch_id, reason
order by batch_id, kind, reason
