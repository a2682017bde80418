-- purpose: read on which cruise speeds the delays rest
-- grain:   one row per version in use
-- params:  none
-- reads:   reference, tally; writes: nothing
select r.reference_id, r.basis
from reference as r
semi join tally as t on t.reference_id = r.reference_id
order by r.reference_id
