-- purpose: read the sections of one batch with all that a tally may sort them by
-- grain:   one row per section
-- params:  $batch_id
-- reads:   section, arm, junction, link; writes: nothing
select
    epoch_us(s.from_at) as from_us, j.time_zone, s.duration_ms, s.path_m,
    coalesce(l.class, a.class) as class, coalesce(l.zone, j.zone) as zone, j.driving_side
from section as s
join arm as a on a.junction_id = s.junction_from_id and a.arm = s.arm_from
join junction as j on j.junction_ix = a.junction_ix
left join link as l on l.link_ix = a.link_ix
where s.batch_id = $batch_id
