-- purpose: load the zone rows of a network
-- grain:   one row per zone
-- params:  none
-- reads:   incoming (registered:
--            zone_ix integer, zone varchar, time_zone varchar, driving_side varchar); writes: zone
insert into zone (
    zone_ix, zone, time_zone, driving_side
)
select
    zone_ix, zone, time_zone, driving_side
from incoming
