-- purpose: what a turn costs, by zone and maneuver, from the passages themselves
-- grain:   one row per zone, maneuver
-- params:  none
-- reads:   passage_full; writes: nothing
create view delay_by_maneuver as
select
    zone, maneuver, count(*) as n_passages, count(distinct vehicle) as n_vehicles,
    (sum(delay_ms) / count(*))::double as mean_delay_ms,
    -- order statistics of rank ceil(q n)
    quantile_disc(delay_ms, 0.5) as p50_delay_ms, quantile_disc(delay_ms, 0.85) as p85_delay_ms
from passage_full
group by zone, maneuver
