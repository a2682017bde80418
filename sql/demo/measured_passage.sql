-- purpose: passages as the demo compares them with its truth
-- grain:   one row per passage
-- params:  none
-- reads:   passage_full; writes: nothing
select
    vehicle, junction_id, arm_in, arm_out, maneuver, zone, epoch_us(entry_at) as entry_us,
    epoch_us(exit_at) as exit_us, delay_ms
from passage_full
order by vehicle, entry_at
