-- purpose: take back the rows of later batches that begin with pings of this one
-- grain:   one row per section taken back
-- params:  $batch_id
-- reads:   span; writes: section
delete from section
where
    batch_id > $batch_id
    and exists (
        select 1 from span as s
        where
            s.batch_id = $batch_id and s.vehicle = section.vehicle
            and section.from_at between s.first_at and s.last_at
    )
