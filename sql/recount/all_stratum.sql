-- purpose: read what the stratum numbers stand for
-- grain:   one row per tally, stratum, dimension
-- params:  none
-- reads:   stratum; writes: nothing
select tally, stratum_id, dimension, value
from stratum
