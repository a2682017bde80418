-- purpose: load the newest states of some vehicles
-- grain:   one row per asked vehicle that has a state
-- params:  none
-- reads:   incoming (registered: ix bigint, vehicle varchar), carry; writes: nothing
select
    i.ix, c.carry_version, c.t_us, c.lon, c.lat, c.held_us, c.held_lon, c.held_lat, c.has_last,
    c.is_held, c.mode, c.is_placed, c.since, c.has_met, c.is_queued, c.n_skipped, c.stay_us, c.stay_lon,
    c.stay_lat, c.trip_start_us, c.first_gate_us, c.last_gate_us, c.passage_us, c.section_us,
    c.unfinished_us, c.other_us, c.path_m, c.n_pings, c.n_passages, c.n_breaks, c.n_caps, c.edge,
    c.n_kept, c.reach_m, c.slow_at_m, c.open_us, c.open_slow_us, c.open_at_m, c.open_arm, c.open_n,
    c.open_step_ms, c.open_speed_mps, c.open_error_s, c.section_arm, c.section_step_ms, c.section_at_m,
    c.arrive_us, c.leave_us, c.kept_lon, c.kept_lat, c.left_lon, c.left_lat, c.kept_n, c.kept_step_ms,
    c.n_columns, c.anchor, c.column_kept, c.column_n, c.at_edge, c.back, c.at_m, c.cost, c.waiting_us,
    c.waiting_lon, c.waiting_lat
from incoming as i
join carry as c on c.vehicle = i.vehicle
where c.replaced_by is null
order by i.ix
