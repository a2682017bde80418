-- purpose: trips that ended, with the time between their first and last gate split into its parts
-- grain:   one row per vehicle and trip_id (no index, see passage); the batch is the one in which it ended
-- params:  none
-- reads:   nothing; writes: trip
create table trip (
    batch_id bigint not null,
    vehicle varchar not null,
    trip_id bigint not null check (trip_id >= 0),
    start_at timestamp not null,
    end_at timestamp not null,
    end_reason varchar not null,
    n_pings integer not null check (n_pings >= 0),
    n_passages integer not null check (n_passages >= 0),
    n_breaks integer not null check (n_breaks >= 0),
    n_caps integer not null check (n_caps >= 0),
    -- both null where the trip met no gate
    first_gate_at timestamp,
    last_gate_at timestamp,
    passage_us bigint not null check (passage_us >= 0),
    section_us bigint not null check (section_us >= 0),
    unfinished_us bigint not null check (unfinished_us >= 0),
    other_us bigint not null check (other_us >= 0),
    path_mm bigint not null check (path_mm >= 0),
    check (end_at >= start_at),
    check ((first_gate_at is null) = (last_gate_at is null))
)
