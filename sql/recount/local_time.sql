-- purpose: count the passages by half minute, time zone, and the day type and time band they bear
-- grain:   one row per half minute, time zone, day type, time band
-- params:  none
-- reads:   passage, junction; writes: nothing
select
    (epoch_us(p.entry_at) // 30000000 * 30000000)::bigint as at_us, j.time_zone, p.day_type, p.time_band,
    count(*) as n
from passage as p
join junction as j on j.junction_id = p.junction_id
group by all
order by all
