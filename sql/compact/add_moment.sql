-- purpose: add up the rows of some batches under a number that none bears yet, that of their month with the sign
--          turned
-- grain:   one row per tally, stratum_id
-- params:  $holder_id
-- reads:   incoming (registered: batch_id bigint); writes: moment
insert into moment (batch_id, tally, stratum_id, n, sum, sum_sq)
select -$holder_id, tally, stratum_id, sum(n)::bigint as n, sum(sum)::hugeint as sum, sum(sum_sq)::hugeint as sum_sq
from moment
where batch_id in (select i.batch_id from incoming as i)
group by tally, stratum_id
