-- purpose: give up the open trips of later states that began with pings of a batch: what they would still give rests
--          on them; the next ping begins a new trip
-- grain:   one row per state
-- params:  $batch_id
-- reads:   span; writes: carry
update carry
set mode = 0, is_placed = 0, n_kept = 0, n_columns = 0, anchor = -1, edge = -1, open_arm = -1, section_arm = -1,
    arrive_us = [], leave_us = [], kept_lon = [], kept_lat = [], left_lon = [], left_lat = [], kept_n = [],
    kept_step_ms = [], column_kept = [], column_n = [], at_edge = [], back = [], at_m = [], cost = []
where
    batch_id > $batch_id and mode = 1
    and trip_start_us <= (
        select max(epoch_us(s.last_at)) from span as s
        where s.batch_id = $batch_id and s.vehicle = carry.vehicle
    )
