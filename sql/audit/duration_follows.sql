-- purpose: find sections whose duration is not their end minus their beginning in whole milliseconds
-- grain:   one row per section at fault; empty means sound
-- params:  none
-- reads:   section; writes: nothing
select
    vehicle, trip_id, from_at, to_at, duration_ms,
    (epoch_us(to_at) - epoch_us(from_at) + 500) // 1000 as wanted_duration_ms
from section
where duration_ms <> (epoch_us(to_at) - epoch_us(from_at) + 500) // 1000
order by vehicle, from_at
