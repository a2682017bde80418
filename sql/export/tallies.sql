-- purpose: read which tallies the store keeps
-- grain:   one row per tally
-- params:  none
-- reads:   tally; writes: nothing
select tally, value, dimensions, reference_id
from tally
order by tally
