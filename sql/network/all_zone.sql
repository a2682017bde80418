-- purpose: read the zone rows of the network
-- grain:   one row per zone
-- params:  none
-- reads:   zone; writes: nothing
select
    zone_ix, zone, time_zone, driving_side
from zone
order by zone_ix
