-- purpose: sum up, by trip, the passages and sections that go with a batch: its own, and those of later batches
--          that begin with its pings
-- grain:   one row per vehicle and trip
-- params:  $batch_id
-- reads:   passage, section, span; writes: nothing
with part as (
    select
        batch_id, vehicle, trip_id, entry_at as begin_at, 1 as n_passages,
        epoch_us(exit_at) - epoch_us(entry_at) as passage_us, 0::bigint as section_us
    from passage
    where batch_id >= $batch_id
    union all
    select
        batch_id, vehicle, trip_id, from_at as begin_at, 0 as n_passages, 0::bigint as passage_us,
        epoch_us(to_at) - epoch_us(from_at) as section_us
    from section
    where batch_id >= $batch_id
)
select
    p.vehicle, p.trip_id, sum(p.n_passages)::integer as n_passages, sum(p.passage_us)::bigint as passage_us,
    sum(p.section_us)::bigint as section_us
from part as p
where
    p.batch_id = $batch_id
    or exists (
        select 1 from span as s
        where s.batch_id = $batch_id and s.vehicle = p.vehicle and p.begin_at between s.first_at and s.last_at
    )
group by p.vehicle, p.trip_id
order by p.vehicle, p.trip_id
