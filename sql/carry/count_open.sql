-- purpose: count the vehicles known, and the trips and passages that are open
-- grain:   one row
-- params:  none
-- reads:   carry, span; writes: nothing
with known as (
    select vehicle from carry
    union
    select vehicle from span
)
select
    (select count(*) from known) as n_vehicles, count(*) filter (where mode = 1) as n_open_trips,
    count(*) filter (where open_arm >= 0) as n_open_passages
from carry
where replaced_by is null
