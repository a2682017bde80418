-- purpose: what detection remembers of a vehicle as a batch left it; one column per field of detect/carry.py,
--          and the pings held back before it
-- grain:   one row per vehicle and batch; that which nothing replaced counts, the others stay so that a batch
--          can be undone (no index, see passage)
-- params:  none
-- reads:   nothing; writes: carry
create table carry (
    vehicle varchar not null,
    batch_id bigint not null,
    -- the batch whose state took its place; null: this one counts
    replaced_by bigint,
    carry_version integer not null,
    -- time of the last good ping, µs since 1970, UTC, as all *_us
    t_us bigint not null,
    -- its place, 1e-7 degree, as all *lon and *lat
    lon integer not null,
    lat integer not null,
    -- ping that is held because it may be a jump
    held_us bigint not null,
    held_lon integer not null,
    held_lat integer not null,
    -- 1: there is a last good ping
    has_last utinyint not null,
    -- 1: a ping is held
    is_held utinyint not null,
    -- 0 idle, 1 moving (a trip is open), 2 parked
    mode utinyint not null,
    -- 1: a committed position is there
    is_placed utinyint not null,
    -- what the time since the last gate belongs to: 0 other, 1 passage, 2 section, 3 unfinished
    since utinyint not null,
    -- 1: the open passage went over a node of its junction
    has_met utinyint not null,
    -- 1: a queue stood past the entry gate of the open passage
    is_queued utinyint not null,
    -- anchors left out since the last column
    n_skipped utinyint not null,
    -- where and since when the vehicle stays
    stay_us bigint not null,
    stay_lon integer not null,
    stay_lat integer not null,
    -- the open trip: start, gates (-1 none), times by kind, length, counts
    trip_start_us bigint not null,
    first_gate_us bigint not null,
    last_gate_us bigint not null,
    passage_us bigint not null,
    section_us bigint not null,
    unfinished_us bigint not null,
    other_us bigint not null,
    path_m double not null,
    n_pings integer not null,
    n_passages integer not null,
    n_breaks integer not null,
    n_caps integer not null,
    -- committed position: directed road (-1 none), kept pings, chainages
    edge integer not null,
    n_kept integer not null,
    reach_m double not null,
    slow_at_m double not null,
    -- open passage: entry, slow time, path at the gate, arm (-1 none), pings, largest step, speed, error
    open_us bigint not null,
    open_slow_us bigint not null,
    open_at_m double not null,
    open_arm integer not null,
    open_n integer not null,
    open_step_ms integer not null,
    open_speed_mps float not null,
    open_error_s float not null,
    -- open section: arm whose exit gate opened it (-1 none), largest step, path at that gate
    section_arm integer not null,
    section_step_ms integer not null,
    section_at_m double not null,
    -- kept pings: arrival and leave, places of both, pings in the stay, largest step
    arrive_us bigint[] not null,
    leave_us bigint[] not null,
    kept_lon integer[] not null,
    kept_lat integer[] not null,
    left_lon integer[] not null,
    left_lat integer[] not null,
    kept_n integer[] not null,
    kept_step_ms integer[] not null,
    -- uncommitted columns of candidates and the kept ping of the last anchor (-1 none)
    n_columns integer not null,
    anchor integer not null,
    -- by column: kept ping, candidates; by column and row: directed road, row before, chainage
    column_kept tinyint[] not null,
    column_n tinyint[] not null,
    at_edge integer[] not null,
    back tinyint[] not null,
    at_m float[] not null,
    -- of the newest column's candidates, log units
    cost double[] not null,
    -- pings held back until later ones have come (clean.lateness_s), in order of arrival; degrees
    waiting_us bigint[] not null,
    waiting_lon double[] not null,
    waiting_lat double[] not null
)
