-- purpose: count the distinct vehicles of passages by the dimensions asked for
-- grain:   one row per combination of the dimensions in $by; the others are null
-- params:  $by
-- reads:   passage_full, junction; writes: nothing
select
    case when list_contains($by::varchar[], 'zone') then p.zone end as zone,
    case when list_contains($by::varchar[], 'maneuver') then p.maneuver end as maneuver,
    case when list_contains($by::varchar[], 'class_in') then p.class_in end as class_in,
    case when list_contains($by::varchar[], 'class_out') then p.class_out end as class_out,
    case when list_contains($by::varchar[], 'control') then p.control end as control,
    case when list_contains($by::varchar[], 'driving_side') then p.driving_side end as driving_side,
    case when list_contains($by::varchar[], 'day_type') then p.day_type end as day_type,
    case when list_contains($by::varchar[], 'time_band') then p.time_band end as time_band,
    -- sectors of 10 degrees, as in tally/strata.py: half-open, 180 in the last
    case
        when list_contains($by::varchar[], 'turn_sector')
            then
                (least(floor(p.turn_deg / 10), 17)::integer * 10)::varchar || '..'
                || (least(floor(p.turn_deg / 10), 17)::integer * 10 + 10)::varchar
    end as turn_sector,
    case when list_contains($by::varchar[], 'junction_id') then p.junction_id::varchar end as junction_id,
    case when list_contains($by::varchar[], 'arm_in') then p.arm_in::varchar end as arm_in,
    case when list_contains($by::varchar[], 'arm_out') then p.arm_out::varchar end as arm_out,
    case when list_contains($by::varchar[], 'is_banned') then p.is_banned::varchar end as is_banned,
    case
        when list_contains($by::varchar[], 'is_queued_at_gate') then p.is_queued_at_gate::varchar
    end as is_queued_at_gate,
    case
        when list_contains($by::varchar[], 'hour')
            then hour(timezone(j.time_zone, timezone('UTC', p.entry_at)))::varchar
    end as hour,
    case
        when list_contains($by::varchar[], 'weekday')
            then isodow(timezone(j.time_zone, timezone('UTC', p.entry_at)))::varchar
    end as weekday,
    case
        when list_contains($by::varchar[], 'month')
            then month(timezone(j.time_zone, timezone('UTC', p.entry_at)))::varchar
    end as month,
    count(distinct p.vehicle) as vehicles
from passage_full as p
join junction as j on j.junction_id = p.junction_id
group by all
