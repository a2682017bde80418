-- purpose: read the trips that are open, with the time that their passages and sections took so far
-- grain:   one row per vehicle on its way
-- params:  none
-- reads:   carry; writes: nothing
select vehicle, trip_start_us, n_passages::bigint as n_passages, passage_us, section_us
from carry
where replaced_by is null and mode = 1
order by vehicle
