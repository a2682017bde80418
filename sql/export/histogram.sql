-- purpose: histograms over all batches with edges and dimensions, of the strata handed in
-- grain:   one row per tally, stratum, bin that is not empty
-- params:  none
-- reads:   incoming (registered: tally varchar, stratum_id bigint), histogram_total, bin, stratum, tally;
--          writes: nothing
with named as (
    select
        tally, stratum_id,
        max(value) filter (where dimension = 'zone') as zone,
        max(value) filter (where dimension = 'maneuver') as maneuver,
        max(value) filter (where dimension = 'class_in') as class_in,
        max(value) filter (where dimension = 'class_out') as class_out,
        max(value) filter (where dimension = 'class') as class,
        max(value) filter (where dimension = 'control') as control,
        max(value) filter (where dimension = 'driving_side') as driving_side,
        max(value) filter (where dimension = 'day_type') as day_type,
        max(value) filter (where dimension = 'time_band') as time_band,
        max(value) filter (where dimension = 'turn_sector') as turn_sector,
        max(value) filter (where dimension = 'junction_id')::bigint as junction_id,
        max(value) filter (where dimension = 'arm_in')::integer as arm_in,
        max(value) filter (where dimension = 'arm_out')::integer as arm_out,
        max(value) filter (where dimension = 'is_banned')::boolean as is_banned,
        max(value) filter (where dimension = 'is_queued_at_gate')::boolean as is_queued_at_gate,
        max(value) filter (where dimension = 'hour')::integer as hour,
        max(value) filter (where dimension = 'weekday')::integer as weekday,
        max(value) filter (where dimension = 'month')::integer as month
    from stratum
    group by tally, stratum_id
)
select
    h.tally, h.stratum_id, t.value, h.bin_ix, b.lower_ms, b.upper_ms, h.n, n.zone, n.maneuver, n.class_in,
    n.class_out, n.class, n.control, n.driving_side, n.day_type, n.time_band, n.turn_sector, n.junction_id,
    n.arm_in, n.arm_out, n.is_banned, n.is_queued_at_gate, n.hour, n.weekday, n.month, t.reference_id
from histogram_total as h
join bin as b on b.bin_ix = h.bin_ix
semi join incoming as i on i.tally = h.tally and i.stratum_id = h.stratum_id
join named as n on n.tally = h.tally and n.stratum_id = h.stratum_id
join tally as t on t.tally = h.tally
order by h.tally, h.stratum_id, h.bin_ix
