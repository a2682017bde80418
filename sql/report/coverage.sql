-- purpose: read how much of the network was seen, by zone
-- grain:   one row per zone
-- params:  none
-- reads:   coverage; writes: nothing
select
    zone, n_movements, n_movements_seen, n_passages, n_vehicles, n_unfinished, first_entry_at, last_entry_at
from coverage
order by zone
