-- purpose: load the link rows of a network
-- grain:   one row per link
-- params:  none
-- reads:   incoming (registered:
--            link_ix integer, arm_from_ix integer, arm_to_ix integer, length_m double, class varchar,
--            limit_kmh double, middle_fwd_m double, middle_back_m double, is_open_fwd boolean,
--            is_open_back boolean, lon double, lat double, zone varchar); writes: link
insert into link (
    link_ix, arm_from_ix, arm_to_ix, length_m, class, limit_kmh, middle_fwd_m, middle_back_m, is_open_fwd,
    is_open_back, lon, lat, zone
)
select
    link_ix, arm_from_ix, arm_to_ix, length_m, class, limit_kmh, middle_fwd_m, middle_back_m, is_open_fwd,
    is_open_back, lon, lat, zone
from incoming
