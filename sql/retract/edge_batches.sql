-- purpose: count the passages and sections of later batches that begin with pings of this one, by the batch that
--          counts them
-- grain:   one row per batch that counts
-- params:  $batch_id
-- reads:   passage, section, span, batch; writes: nothing
with part as (
    select batch_id, vehicle, entry_at as begin_at, 1 as n_passages, 0 as n_sections
    from passage
    where batch_id > $batch_id
    union all
    select batch_id, vehicle, from_at as begin_at, 0 as n_passages, 1 as n_sections
    from section
    where batch_id > $batch_id
)
select
    coalesce(b.rolled_into, b.batch_id) as holder_id, sum(p.n_passages)::bigint as n_passages,
    sum(p.n_sections)::bigint as n_sections
from part as p
join batch as b on b.batch_id = p.batch_id
where exists (
    select 1 from span as s
    where s.batch_id = $batch_id and s.vehicle = p.vehicle and p.begin_at between s.first_at and s.last_at
)
group by holder_id
order by holder_id
