-- purpose: count the vehicles known, and the trips and passages that are open
-- grain:   one row
-- params:  none
-- reads:   carry, carry_newest; writes: nothing
select
    count(*) as n_vehicles, count(*) filter (where c.mode = 1) as n_open_trips,
    count(*) filter (where c.open_arm >= 0) as n_open_passages
from carry_newest as n
join carry as c on c.vehicle = n.vehicle and c.batch_id = n.batch_id
