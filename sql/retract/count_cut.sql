-- purpose: count the trips that lie partly in one batch: those with rows in earlier ones, and in later ones
-- grain:   one row
-- params:  $batch_id
-- reads:   passage, section, unfinished, trip; writes: nothing
with part as (
    select batch_id, vehicle, trip_id from passage
    union all
    select batch_id, vehicle, trip_id from section
    union all
    select batch_id, vehicle, trip_id from unfinished
    union all
    select batch_id, vehicle, trip_id from trip
), crossing as (
    select
        vehicle, trip_id, bool_or(batch_id < $batch_id) as is_before, bool_or(batch_id > $batch_id) as is_after
    from part
    group by vehicle, trip_id
    having bool_or(batch_id = $batch_id)
)
select count(*) filter (where is_before) as n_start, count(*) filter (where is_after) as n_end
from crossing
