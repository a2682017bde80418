-- purpose: read the link rows of the network
-- grain:   one row per link
-- params:  none
-- reads:   link; writes: nothing
select
    link_ix, arm_from_ix, arm_to_ix, length_m, class, limit_kmh, middle_fwd_m, middle_back_m, is_open_fwd,
    is_open_back, lon, lat, zone
from link
order by link_ix
