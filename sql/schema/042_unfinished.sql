-- purpose: passages that were entered and not seen to leave, by reason
-- grain:   one row per vehicle and entry_at (no index, see passage)
-- params:  none
-- reads:   nothing; writes: unfinished
create table unfinished (
    batch_id bigint not null,
    vehicle varchar not null,
    trip_id bigint not null check (trip_id >= 0),
    junction_id bigint not null,
    arm_in integer not null check (arm_in >= 0),
    reason varchar not null,
    entry_at timestamp not null,
    -- last sight inside
    last_at timestamp not null,
    check (last_at >= entry_at)
)
