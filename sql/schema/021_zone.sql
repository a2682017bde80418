-- purpose: the polygons that name a junction's zone
-- grain:   one row per zone
-- params:  none
-- reads:   nothing; writes: zone
create table zone (
    zone_ix integer not null primary key check (zone_ix >= 0),
    zone varchar not null unique,
    time_zone varchar not null,
    driving_side varchar not null check (driving_side in ('right', 'left'))
)
