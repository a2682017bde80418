-- purpose: find counts that differ: histogram against moment by stratum, and moment against the passages of the
--          batch, or of the month that was rolled up
-- grain:   one row per batch, tally and, where it applies, stratum at fault; empty means sound
-- params:  none
-- reads:   histogram, moment, tally, passage, batch; writes: nothing
with counted as (
    select batch_id, tally, stratum_id, sum(n)::bigint as n
    from histogram
    group by batch_id, tally, stratum_id
), summed as (
    select batch_id, tally, sum(n)::bigint as n, sum(sum) as total
    from moment
    group by batch_id, tally
), holder as (
    -- the batch whose number the counts bear: its own, or that of its month once rolled up
    select batch_id as part_id, coalesce(rolled_into, batch_id) as batch_id
    from batch
), passed as (
    select h.batch_id, count(*) as n, sum(p.delay_ms) as total
    from passage as p
    join holder as h on h.part_id = p.batch_id
    group by h.batch_id
), wanted as (
    select b.batch_id, t.tally, coalesce(p.n, 0) as n, coalesce(p.total, 0) as total
    from batch as b
    cross join tally as t
    left join passed as p on p.batch_id = b.batch_id
    where t.value = 'delay'
)
select
    coalesce(c.batch_id, m.batch_id) as batch_id, coalesce(c.tally, m.tally) as tally,
    coalesce(c.stratum_id, m.stratum_id) as stratum_id, 'histogram, moment' as compared,
    coalesce(c.n, 0) as n_left, coalesce(m.n, 0) as n_right, null::hugeint as total_left,
    null::hugeint as total_right
from counted as c
full join moment as m on m.batch_id = c.batch_id and m.tally = c.tally and m.stratum_id = c.stratum_id
where c.n is distinct from m.n
union all
select
    w.batch_id, w.tally, null::bigint as stratum_id, 'moment, passage' as compared, coalesce(s.n, 0) as n_left,
    w.n as n_right, coalesce(s.total, 0)::hugeint as total_left, w.total::hugeint as total_right
from wanted as w
left join summed as s on s.batch_id = w.batch_id and s.tally = w.tally
where coalesce(s.n, 0) <> w.n or coalesce(s.total, 0) <> w.total
order by batch_id, tally, stratum_id
