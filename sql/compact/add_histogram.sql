-- purpose: add up the rows of some batches under a number that none bears yet, that of their month with the sign
--          turned
-- grain:   one row per tally, stratum_id, bin_ix
-- params:  $holder_id
-- reads:   incoming (registered: batch_id bigint); writes: histogram
insert into histogram (batch_id, tally, stratum_id, bin_ix, n)
select -$holder_id, tally, stratum_id, bin_ix, sum(n)::bigint as n
from histogram
where batch_id in (select i.batch_id from incoming as i)
group by tally, stratum_id, bin_ix
