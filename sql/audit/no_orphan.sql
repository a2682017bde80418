-- purpose: find rows that refer to a batch, movement, arm, stratum, tally or reference that is not there
-- grain:   one row per table and missing thing; empty means sound
-- params:  none
-- reads:   passage, section, unfinished, trip, histogram, moment, batch_count, carry, batch, movement, arm, stratum,
--          tally, reference, span; writes: nothing
with part as (
    select 'passage' as table_name, batch_id from passage
    union all
    select 'section' as table_name, batch_id from section
    union all
    select 'unfinished' as table_name, batch_id from unfinished
    union all
    select 'trip' as table_name, batch_id from trip
    union all
    select 'histogram' as table_name, batch_id from histogram
    union all
    select 'moment' as table_name, batch_id from moment
    union all
    select 'batch_count' as table_name, batch_id from batch_count
    union all
    select 'carry' as table_name, batch_id from carry
    union all
    select 'carry' as table_name, replaced_by as batch_id from carry
    where replaced_by is not null
    union all
    select 'span' as table_name, batch_id from span
    union all
    select 'batch' as table_name, rolled_into as batch_id from batch
    where rolled_into is not null
)
select p.table_name, 'batch ' || p.batch_id::varchar as missing, count(*) as n
from part as p
anti join batch as b on b.batch_id = p.batch_id
group by p.table_name, p.batch_id
union all
select
    'passage' as table_name,
    'movement ' || p.junction_id::varchar || ' ' || p.arm_in::varchar || ' ' || p.arm_out::varchar as missing,
    count(*) as n
from passage as p
anti join movement as m on m.junction_id = p.junction_id and m.arm_in = p.arm_in and m.arm_out = p.arm_out
group by p.junction_id, p.arm_in, p.arm_out
union all
select 'passage' as table_name, 'reference ' || p.reference_id::varchar as missing, count(*) as n
from passage as p
anti join reference as r on r.reference_id = p.reference_id
group by p.reference_id
union all
select
    'section' as table_name, 'arm ' || s.junction_from_id::varchar || ' ' || s.arm_from::varchar as missing,
    count(*) as n
from section as s
anti join arm as a on a.junction_id = s.junction_from_id and a.arm = s.arm_from
group by s.junction_from_id, s.arm_from
union all
select
    'section' as table_name, 'arm ' || s.junction_to_id::varchar || ' ' || s.arm_to::varchar as missing,
    count(*) as n
from section as s
anti join arm as a on a.junction_id = s.junction_to_id and a.arm = s.arm_to
group by s.junction_to_id, s.arm_to
union all
select
    'unfinished' as table_name, 'arm ' || u.junction_id::varchar || ' ' || u.arm_in::varchar as missing,
    count(*) as n
from unfinished as u
anti join arm as a on a.junction_id = u.junction_id and a.arm = u.arm_in
group by u.junction_id, u.arm_in
union all
select 'moment' as table_name, 'stratum ' || m.tally || ' ' || m.stratum_id::varchar as missing, count(*) as n
from moment as m
anti join stratum as s on s.tally = m.tally and s.stratum_id = m.stratum_id
group by m.tally, m.stratum_id
union all
select 'stratum' as table_name, 'tally ' || s.tally as missing, count(*) as n
from stratum as s
anti join tally as t on t.tally = s.tally
group by s.tally
union all
select 'stratum' as table_name, 'moment ' || s.tally || ' ' || s.stratum_id::varchar as missing, count(*) as n
from stratum as s
anti join moment as m on m.tally = s.tally and m.stratum_id = s.stratum_id
group by s.tally, s.stratum_id
order by table_name, missing
