-- purpose: read how many passages or sections each stratum holds over all batches
-- grain:   one row per tally, stratum
-- params:  none
-- reads:   moment; writes: nothing
select tally, stratum_id, sum(n)::bigint as n
from moment
group by tally, stratum_id
order by tally, stratum_id
