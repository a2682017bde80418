-- purpose: add count, sum and sum of squares of one batch
-- grain:   one row per tally, stratum
-- params:  $batch_id
-- reads:   incoming (registered:
--            tally varchar, stratum_id bigint, n bigint, sum hugeint, sum_sq hugeint); writes: moment
insert into moment (
    batch_id, tally, stratum_id, n, sum, sum_sq
)
select
    $batch_id, tally, stratum_id, n, sum::hugeint, sum_sq::hugeint
from incoming
