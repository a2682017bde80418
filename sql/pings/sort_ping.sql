-- purpose: put pings in order of time, those of one time in the order of the source
-- grain:   one row per ping
-- params:  none
-- reads:   incoming (registered: vehicle_ix integer, t_us bigint, lon double, lat double, row_ix bigint);
--          writes: nothing
select vehicle_ix, t_us, lon, lat
from incoming
order by t_us, row_ix
