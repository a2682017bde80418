-- purpose: movements as from-way, via, to-way, with the delays of those that hold enough passages
-- grain:   one row per movement
-- params:  $min_passages, $min_vehicles
-- reads:   movement, arm, junction, passage; writes: nothing
with passed as (
    select
        junction_id, arm_in, arm_out, count(*) as n_passages, count(distinct vehicle) as n_vehicles,
        sum(delay_ms)::bigint as total_delay_ms, (sum(delay_ms) / count(*))::double as mean_delay_ms,
        -- order statistics of rank ceil(q n)
        quantile_disc(delay_ms, 0.5) as p50_delay_ms, quantile_disc(delay_ms, 0.85) as p85_delay_ms
    from passage
    group by junction_id, arm_in, arm_out
), told as (
    select
        m.junction_id, m.arm_in, m.arm_out, i.way_id as way_in_id, j.junction_id as via_node_id,
        o.way_id as way_out_id, m.turn_deg, m.maneuver, m.inside_m, m.is_banned, m.is_timed,
        i.class as class_in, o.class as class_out, j.control, j.zone, j.driving_side,
        coalesce(p.n_passages, 0) as n_passages, coalesce(p.n_vehicles, 0) as n_vehicles, p.total_delay_ms,
        p.mean_delay_ms, p.p50_delay_ms, p.p85_delay_ms,
        coalesce(p.n_passages, 0) < $min_passages or coalesce(p.n_vehicles, 0) < $min_vehicles as is_withheld
    from movement as m
    join arm as i on i.arm_ix = m.arm_in_ix
    join arm as o on o.arm_ix = m.arm_out_ix
    join junction as j on j.junction_ix = m.junction_ix
    left join passed as p on p.junction_id = m.junction_id and p.arm_in = m.arm_in and p.arm_out = m.arm_out
)
select
    junction_id, arm_in, arm_out, way_in_id, via_node_id, way_out_id, turn_deg, maneuver, inside_m, is_banned,
    is_timed, class_in, class_out, control, zone, driving_side, is_withheld,
    case when not is_withheld then n_passages end as n_passages,
    case when not is_withheld then n_vehicles end as n_vehicles,
    case when not is_withheld then total_delay_ms end as total_delay_ms,
    case when not is_withheld then mean_delay_ms end as mean_delay_ms,
    case when not is_withheld then p50_delay_ms end as p50_delay_ms,
    case when not is_withheld then p85_delay_ms end as p85_delay_ms
from told
order by junction_id, arm_in, arm_out
