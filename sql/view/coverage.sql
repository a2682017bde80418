-- purpose: how much of the network the archive has seen
-- grain:   one row per zone
-- params:  none
-- reads:   junction, movement, passage, unfinished; writes: nothing
create view coverage as
with known as (
    select j.zone, count(*) as n_movements
    from movement as m
    join junction as j on j.junction_ix = m.junction_ix
    group by j.zone
), seen as (
    select
        j.zone, count(distinct (p.junction_id, p.arm_in, p.arm_out)) as n_movements_seen,
        count(*) as n_passages, count(distinct p.vehicle) as n_vehicles,
        min(p.entry_at) as first_entry_at, max(p.entry_at) as last_entry_at
    from passage as p
    join junction as j on j.junction_id = p.junction_id
    group by j.zone
), lost as (
    select j.zone, count(*) as n_unfinished
    from unfinished as u
    join junction as j on j.junction_id = u.junction_id
    group by j.zone
)
select
    k.zone, k.n_movements, coalesce(s.n_movements_seen, 0) as n_movements_seen,
    coalesce(s.n_passages, 0) as n_passages, coalesce(s.n_vehicles, 0) as n_vehicles,
    coalesce(l.n_unfinished, 0) as n_unfinished, s.first_entry_at, s.last_entry_at
from known as k
left join seen as s on s.zone = k.zone
left join lost as l on l.zone = k.zone
