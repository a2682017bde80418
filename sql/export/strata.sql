-- purpose: read what the strata of one tally stand for
-- grain:   one row per stratum, dimension
-- params:  $tally
-- reads:   stratum; writes: nothing
select stratum_id, dimension, value
from stratum
where tally = $tally
order by stratum_id, dimension
