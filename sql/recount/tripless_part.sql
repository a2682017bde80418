-- purpose: add up the passages and sections of trips that have no row, as they are open or lost
-- grain:   one row per vehicle and trip without a row
-- params:  none
-- reads:   passage, section, unfinished, trip; writes: nothing
with part as (
    select vehicle, trip_id, 1 as n_passages, epoch_us(exit_at) - epoch_us(entry_at) as passage_us, 0 as section_us
    from passage
    union all
    select vehicle, trip_id, 0 as n_passages, 0 as passage_us, epoch_us(to_at) - epoch_us(from_at) as section_us
    from section
    union all
    select vehicle, trip_id, 0 as n_passages, 0 as passage_us, 0 as section_us
    from unfinished
)
select
    p.vehicle, p.trip_id, sum(p.n_passages)::bigint as n_passages, sum(p.passage_us)::bigint as passage_us,
    sum(p.section_us)::bigint as section_us
from part as p
anti join trip as t on t.vehicle = p.vehicle and t.trip_id = p.trip_id
group by p.vehicle, p.trip_id
order by p.vehicle, p.trip_id
