-- purpose: junctions passed, gate to gate; static attributes are joined from movement, arm, junction
-- grain:   one row per vehicle and entry_at; keyed without an index, which would grow with the archive
--          (audit/key_twice.sql holds the key)
-- params:  none
-- reads:   nothing; writes: passage
create table passage (
    batch_id bigint not null,
    vehicle varchar not null,
    trip_id bigint not null check (trip_id >= 0),
    junction_id bigint not null,
    arm_in integer not null check (arm_in >= 0),
    arm_out integer not null check (arm_out >= 0),
    -- timestamps are UTC with microseconds
    entry_at timestamp not null,
    exit_at timestamp not null,
    traversal_ms integer not null check (traversal_ms >= 0),
    delay_ms integer not null,
    gate_in_m double not null check (gate_in_m >= 0),
    inside_m double not null check (inside_m >= 0),
    gate_out_m double not null check (gate_out_m >= 0),
    n_pings integer not null check (n_pings >= 0),
    max_step_ms integer not null check (max_step_ms >= 0),
    slow_ms integer not null check (slow_ms >= 0),
    timing_error_ms integer not null check (timing_error_ms >= 0),
    entry_speed_mps float not null,
    is_queued_at_gate boolean not null,
    -- of the entry, in the junction's local time
    day_type varchar not null,
    time_band varchar not null,
    reference_id integer not null,
    check (exit_at >= entry_at)
)
