-- purpose: tell up to when vehicles were seen, in any batch and in backfills
-- grain:   one row
-- params:  none
-- reads:   span; writes: nothing
select
    epoch_us(max(last_at)) as any_us, epoch_us(max(last_at) filter (where is_backfill)) as backfill_us
from span
