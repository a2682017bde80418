-- purpose: find keys that stand twice in the tables that carry no index
-- grain:   one row per table and key at fault; empty means sound
-- params:  none
-- reads:   passage, section, unfinished, trip, histogram, moment, carry, span; writes: nothing
select 'passage' as table_name, vehicle || ' ' || entry_at::varchar as key, count(*) as n
from passage
group by vehicle, entry_at
having count(*) > 1
union all
select 'section' as table_name, vehicle || ' ' || from_at::varchar as key, count(*) as n
from section
group by vehicle, from_at
having count(*) > 1
union all
select 'unfinished' as table_name, vehicle || ' ' || entry_at::varchar as key, count(*) as n
from unfinished
group by vehicle, entry_at
having count(*) > 1
union all
select 'trip' as table_name, vehicle || ' ' || trip_id::varchar as key, count(*) as n
from trip
group by vehicle, trip_id
having count(*) > 1
union all
select
    'histogram' as table_name,
    batch_id::varchar || ' ' || tally || ' ' || stratum_id::varchar || ' ' || bin_ix::varchar as key, count(*) as n
from histogram
group by batch_id, tally, stratum_id, bin_ix
having count(*) > 1
union all
select
    'moment' as table_name, batch_id::varchar || ' ' || tally || ' ' || stratum_id::varchar as key,
    count(*) as n
from moment
group by batch_id, tally, stratum_id
having count(*) > 1
union all
select 'carry' as table_name, vehicle || ' ' || batch_id::varchar as key, count(*) as n
from carry
group by vehicle, batch_id
having count(*) > 1
union all
select 'carry that counts' as table_name, vehicle as key, count(*) as n
from carry
where replaced_by is null
group by vehicle
having count(*) > 1
union all
select
    'span' as table_name, vehicle || ' ' || batch_id::varchar || ' ' || first_at::varchar as key, count(*) as n
from span
group by vehicle, batch_id, first_at
having count(*) > 1
order by table_name, key
