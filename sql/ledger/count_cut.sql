-- purpose: count the trips of a batch that begin, and those it left open, within a silence of pings that another
--          batch holds: they may be parts of longer trips
-- grain:   one row
-- params:  $batch_id, $max_gap_us
-- reads:   trip, span; writes: nothing
with own as (
    select vehicle, trip_id, start_at, end_at, end_reason
    from trip
    where batch_id = $batch_id
), near as (
    select
        o.vehicle, o.trip_id,
        bool_or(s.last_at <= o.start_at and s.last_at >= o.start_at - to_microseconds($max_gap_us)) as is_start,
        bool_or(
            o.end_reason = 'close' and s.first_at >= o.end_at
            and s.first_at <= o.end_at + to_microseconds($max_gap_us)
        ) as is_end
    from own as o
    join span as s on s.vehicle = o.vehicle
    where s.batch_id <> $batch_id
    group by o.vehicle, o.trip_id
)
select count(*) filter (where is_start) as n_start, count(*) filter (where is_end) as n_end
from near
