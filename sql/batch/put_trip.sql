-- purpose: add the trips that ended in one chunk
-- grain:   one row per trip
-- params:  $batch_id
-- reads:   incoming (registered:
--            vehicle varchar, trip_id bigint, start_us bigint, end_us bigint, end_reason varchar,
--            n_pings integer, n_passages integer, n_breaks integer, n_caps integer, first_gate_us bigint,
--            last_gate_us bigint, passage_us bigint, section_us bigint, unfinished_us bigint,
--            other_us bigint, path_mm bigint); writes: trip
insert into trip (
    batch_id, vehicle, trip_id, start_at, end_at, end_reason, n_pings, n_passages, n_breaks, n_caps,
    first_gate_at, last_gate_at, passage_us, section_us, unfinished_us, other_us, path_mm
)
select
    $batch_id, vehicle, trip_id, make_timestamp(start_us), make_timestamp(end_us), end_reason, n_pings,
    n_passages, n_breaks, n_caps, make_timestamp(first_gate_us), make_timestamp(last_gate_us), passage_us,
    section_us, unfinished_us, other_us, path_mm
from incoming
