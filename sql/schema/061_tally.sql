-- purpose: the tallies that the store keeps, what they measure, and the reference their delays rest on
-- grain:   one row per tally
-- params:  none
-- reads:   nothing; writes: tally
create table tally (
    tally varchar not null primary key,
    -- delay of passages in ms, or pace of sections in ms per km
    value varchar not null check (value in ('delay', 'pace')),
    dimensions varchar[] not null,
    reference_id integer not null
)
