-- purpose: read what delays and local times follow from, of the passages set aside, in a range of row numbers
-- grain:   one row per passage
-- params:  $first, $last
-- reads:   passage_before, arm, junction; writes: nothing
select
    p.rowid as row_ix, epoch_us(p.entry_at) as entry_us, p.traversal_ms, p.gate_in_m, p.inside_m, p.gate_out_m,
    coalesce(i.limit_in_kmh, i.limit_kmh) as in_kmh, coalesce(o.limit_out_kmh, o.limit_kmh) as out_kmh,
    j.time_zone
from passage_before as p
left join arm as i on i.junction_id = p.junction_id and i.arm = p.arm_in
left join arm as o on o.junction_id = p.junction_id and o.arm = p.arm_out
left join junction as j on j.junction_id = p.junction_id
where p.rowid between $first and $last
