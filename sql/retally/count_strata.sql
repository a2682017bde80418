-- purpose: count the strata of each tally that hold anything
-- grain:   one row per tally
-- params:  none
-- reads:   moment; writes: nothing
select tally, count(distinct stratum_id) as n
from moment
group by tally
order by tally
