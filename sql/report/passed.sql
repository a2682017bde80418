-- purpose: count vehicles, junctions and passages, and the passages that say less than they seem to
-- grain:   one row
-- params:  none
-- reads:   passage, movement; writes: nothing
select
    count(*) as n_passages, count(distinct p.vehicle) as n_vehicles, count(distinct p.junction_id) as n_junctions,
    count(*) filter (where p.is_queued_at_gate) as n_queued_at_gate, count(*) filter (where m.is_banned) as n_banned,
    quantile_disc(p.max_step_ms, 0.5) as p50_max_step_ms
from passage as p
join movement as m on m.junction_id = p.junction_id and m.arm_in = p.arm_in and m.arm_out = p.arm_out
