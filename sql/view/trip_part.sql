-- purpose: what a trip is made of: millimetres by class outside and inside the gates, passages by maneuver and
--          greatest class; integers, so that sums do not depend on their order
-- grain:   one row per vehicle, trip, part (outside, inside, passage), class, maneuver (empty for lengths)
-- params:  none
-- reads:   section, arm, passage_full; writes: nothing
create view trip_part as
select
    s.vehicle, s.trip_id, 'outside' as part, a.class, '' as maneuver,
    sum(round(s.path_m * 1000)::bigint)::bigint as length_mm, 0::bigint as n_passages
from section as s
join arm as a on a.junction_id = s.junction_from_id and a.arm = s.arm_from
group by s.vehicle, s.trip_id, a.class
union all
select
    vehicle, trip_id, 'inside' as part, class_max as class, '' as maneuver,
    sum(round((gate_in_m + inside_m + gate_out_m) * 1000)::bigint)::bigint as length_mm, 0::bigint as n_passages
from passage_full
group by vehicle, trip_id, class_max
union all
select
    vehicle, trip_id, 'passage' as part, class_max as class, maneuver, 0::bigint as length_mm,
    count(*) as n_passages
from passage_full
group by vehicle, trip_id, class_max, maneuver
