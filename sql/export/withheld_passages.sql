-- purpose: count what the export of passages withholds: those of movements with too few of them
-- grain:   one row
-- params:  $min_passages, $min_vehicles
-- reads:   passage; writes: nothing
with thin as (
    select count(*) as n
    from passage
    group by junction_id, arm_in, arm_out
    having count(*) < $min_passages or count(distinct vehicle) < $min_vehicles
)
select count(*) as n_strata, coalesce(sum(n), 0)::bigint as n_rows
from thin
