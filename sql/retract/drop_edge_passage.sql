-- purpose: take back the rows of later batches that begin with pings of this one
-- grain:   one row per passage taken back
-- params:  $batch_id
-- reads:   span; writes: passage
delete from passage
where
    batch_id > $batch_id
    and exists (
        select 1 from span as s
        where
            s.batch_id = $batch_id and s.vehicle = passage.vehicle
            and passage.entry_at between s.first_at and s.last_at
    )
