-- purpose: links with the arms at their two ends
-- grain:   one row per link
-- params:  none
-- reads:   link, arm; writes: nothing
select
    l.link_ix, f.junction_id as junction_from_id, f.arm as arm_from, f.way_id as way_from_id,
    t.junction_id as junction_to_id, t.arm as arm_to, t.way_id as way_to_id, l.length_m, l.class, l.limit_kmh,
    l.middle_fwd_m, l.middle_back_m, l.is_open_fwd, l.is_open_back, l.zone
from link as l
left join arm as f on f.arm_ix = l.arm_from_ix
left join arm as t on t.arm_ix = l.arm_to_ix
order by l.link_ix
