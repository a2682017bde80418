-- purpose: find passages whose traversal is not exit minus entry, or whose delay is not traversal minus the time
--          that the way takes at the speed limit, else the class default (DESIGN section 6)
-- grain:   one row per passage at fault; empty means sound
-- params:  none
-- reads:   passage, arm; writes: nothing
with timed as (
    select
        p.vehicle, p.entry_at, p.traversal_ms, p.delay_ms, p.reference_id, p.gate_in_m, p.inside_m, p.gate_out_m,
        (epoch_us(p.exit_at) - epoch_us(p.entry_at) + 500) // 1000 as wanted_traversal_ms,
        1 / (coalesce(i.limit_in_kmh, i.limit_kmh) / 3.6) as pace_in,
        1 / (coalesce(o.limit_out_kmh, o.limit_kmh) / 3.6) as pace_out
    from passage as p
    join arm as i on i.junction_id = p.junction_id and i.arm = p.arm_in
    join arm as o on o.junction_id = p.junction_id and o.arm = p.arm_out
), wanted as (
    select
        vehicle, entry_at, reference_id, traversal_ms, wanted_traversal_ms, delay_ms,
        traversal_ms - round_even(
            (gate_in_m * pace_in + inside_m * ((pace_in + pace_out) * 0.5) + gate_out_m * pace_out) * 1000, 0
        )::bigint as wanted_delay_ms
    from timed
)
select vehicle, entry_at, traversal_ms, wanted_traversal_ms, delay_ms, wanted_delay_ms
from wanted
where traversal_ms <> wanted_traversal_ms or (reference_id = 1 and delay_ms <> wanted_delay_ms)
order by vehicle, entry_at
