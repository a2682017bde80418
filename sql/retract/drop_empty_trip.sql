-- purpose: take back trips that ended in later batches but lie whole in the pings of this one
-- grain:   one row per trip
-- params:  $batch_id
-- reads:   span; writes: trip
delete from trip
where
    batch_id > $batch_id
    and exists (
        select 1 from span as s
        where
            s.batch_id = $batch_id and s.vehicle = trip.vehicle and trip.start_at >= s.first_at
            and trip.end_at <= s.last_at
    )
