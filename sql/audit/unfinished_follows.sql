-- purpose: find trips with unfinished time but no unfinished passage, or more of it than lies between unfinished
--          entries and the next gates that are known; and unfinished passages out of the gates of their trip
-- grain:   one row per trip at fault; empty means sound. Nothing of it is asked of a store from whose middle a
--          batch was taken back (a number is missing): its unfinished entries went, the trips across it stay
-- params:  none
-- reads:   trip, passage, section, unfinished, batch; writes: nothing
with gate as (
    select vehicle, trip_id, entry_at as gate_at, false as is_unfinished from passage
    union all
    select vehicle, trip_id, from_at as gate_at, false as is_unfinished from section
    union all
    select vehicle, trip_id, to_at as gate_at, false as is_unfinished from section
    union all
    select vehicle, trip_id, entry_at as gate_at, true as is_unfinished from unfinished
    union all
    select vehicle, trip_id, last_gate_at as gate_at, false as is_unfinished from trip
    where last_gate_at is not null
), ordered as (
    select
        vehicle, trip_id, gate_at, is_unfinished,
        min(gate_at) over (
            partition by vehicle, trip_id order by gate_at
            range between interval 1 microsecond following and unbounded following
        ) as next_at
    from gate
), reach as (
    select
        vehicle, trip_id, count(*) as n, min(gate_at) as first_at, max(gate_at) as last_at,
        coalesce(sum(epoch_us(next_at) - epoch_us(gate_at)), 0)::bigint as longest_us
    from ordered
    where is_unfinished
    group by vehicle, trip_id
)
select
    t.vehicle, t.trip_id, t.batch_id, t.unfinished_us, coalesce(r.n, 0) as n_unfinished, r.longest_us,
    t.first_gate_at, t.last_gate_at, r.first_at, r.last_at
from trip as t
left join reach as r on r.vehicle = t.vehicle and r.trip_id = t.trip_id
where
    (
        t.unfinished_us > coalesce(r.longest_us, 0)
        or (r.n > 0 and (t.first_gate_at is null or r.first_at < t.first_gate_at or r.last_at > t.last_gate_at))
    )
    and (select count(*) = max(b.batch_id) from batch as b)
order by t.vehicle, t.trip_id
