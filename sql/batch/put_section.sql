-- purpose: add the sections of one chunk
-- grain:   one row per section
-- params:  $batch_id
-- reads:   incoming (registered:
--            vehicle varchar, trip_id bigint, junction_from_id bigint, arm_from integer,
--            junction_to_id bigint, arm_to integer, from_us bigint, to_us bigint, duration_ms integer,
--            path_m double, max_step_ms integer); writes: section
insert into section (
    batch_id, vehicle, trip_id, junction_from_id, arm_from, junction_to_id, arm_to, from_at, to_at,
    duration_ms, path_m, max_step_ms
)
select
    $batch_id, vehicle, trip_id, junction_from_id, arm_from, junction_to_id, arm_to,
    make_timestamp(from_us), make_timestamp(to_us), duration_ms, path_m, max_step_ms
from incoming
