-- purpose: find when some vehicles were seen, as far as it touches a range of time
-- grain:   one row per asked vehicle and span
-- params:  $from_us, $to_us, $only_backfill
-- reads:   incoming (registered: ix bigint, vehicle varchar), span; writes: nothing
select i.ix, epoch_us(s.first_at) as first_us, epoch_us(s.last_at) as last_us
from span as s
join incoming as i on i.vehicle = s.vehicle
where
    s.last_at >= make_timestamp($from_us) and s.first_at <= make_timestamp($to_us)
    and (s.is_backfill or not $only_backfill)
order by i.ix, first_us
