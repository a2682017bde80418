-- purpose: write the dropped rows of a batch, by reason
-- grain:   one row per reason that occurred
-- params:  $batch_id
-- reads:   incoming (registered:
--            reason varchar, n bigint); writes: batch_count
insert into batch_count (
    batch_id, reason, n
)
select
    $batch_id, reason, n
from incoming
