-- purpose: count the distinct vehicles of sections by the dimensions asked for
-- grain:   one row per combination of the dimensions in $by; the others are null
-- params:  $by, $min_m, $band_of_hour, $type_of_day
-- reads:   section, arm, junction, link; writes: nothing
with told as (
    select
        s.vehicle, coalesce(l.zone, j.zone) as zone, coalesce(l.class, a.class) as class, j.driving_side,
        case
            when list_has_any($by::varchar[], ['day_type', 'time_band', 'hour', 'weekday', 'month'])
                then timezone(j.time_zone, timezone('UTC', s.from_at))
        end as local_at
    from section as s
    join arm as a on a.junction_id = s.junction_from_id and a.arm = s.arm_from
    join junction as j on j.junction_id = s.junction_from_id
    left join link as l on l.link_ix = a.link_ix
    where s.path_m >= $min_m and s.path_m > 0
)
select
    case when list_contains($by::varchar[], 'zone') then zone end as zone,
    case when list_contains($by::varchar[], 'class') then class end as class,
    case when list_contains($by::varchar[], 'driving_side') then driving_side end as driving_side,
    -- lists count from 1: 24 labels by hour, 7 from Monday
    case
        when list_contains($by::varchar[], 'day_type') then ($type_of_day::varchar[])[isodow(local_at)]
    end as day_type,
    case
        when list_contains($by::varchar[], 'time_band') then ($band_of_hour::varchar[])[hour(local_at) + 1]
    end as time_band,
    case when list_contains($by::varchar[], 'hour') then hour(local_at)::varchar end as hour,
    case when list_contains($by::varchar[], 'weekday') then isodow(local_at)::varchar end as weekday,
    case when list_contains($by::varchar[], 'month') then month(local_at)::varchar end as month,
    count(distinct vehicle) as vehicles
from told
group by all
