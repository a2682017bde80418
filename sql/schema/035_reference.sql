-- purpose: versions of the cruise speeds that unimpeded times rest on
-- grain:   one row per version
-- params:  none
-- reads:   nothing; writes: reference
create table reference (
    reference_id integer not null primary key check (reference_id >= 1),
    basis varchar not null,
    made_at timestamp not null
)
