-- purpose: hand what a batch recorded of earlier pings on to the next batch of the vehicle, which would have
--          recorded it
-- grain:   one row per section handed on
-- params:  $batch_id
-- reads:   carry, span; writes: section
update section
set batch_id = c.replaced_by
from carry as c
where
    section.batch_id = $batch_id and c.batch_id = $batch_id and c.vehicle = section.vehicle
    and c.replaced_by is not null
    and not exists (
        select 1 from span as s
        where s.batch_id = $batch_id and s.vehicle = section.vehicle and s.first_at <= section.to_at
    )
