-- purpose: stretches of trips between an exit gate and the next entry gate
-- grain:   one row per vehicle and from_at (no index, see passage)
-- params:  none
-- reads:   nothing; writes: section
create table section (
    batch_id bigint not null,
    vehicle varchar not null,
    trip_id bigint not null check (trip_id >= 0),
    -- junction and arm whose exit gate opens it, and whose entry gate closes it
    junction_from_id bigint not null,
    arm_from integer not null check (arm_from >= 0),
    junction_to_id bigint not null,
    arm_to integer not null check (arm_to >= 0),
    from_at timestamp not null,
    to_at timestamp not null,
    duration_ms integer not null check (duration_ms >= 0),
    path_m double not null check (path_m >= 0),
    max_step_ms integer not null check (max_step_ms >= 0),
    check (to_at >= from_at)
)
