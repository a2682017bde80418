-- purpose: name the tallies that the first batch opens
-- grain:   one row per tally
-- params:  none
-- reads:   incoming (registered:
--            tally varchar, value varchar, dimensions varchar[], reference_id integer), tally; writes: tally
insert into tally (tally, value, dimensions, reference_id)
select n.tally, n.value, n.dimensions, n.reference_id
from incoming as n
anti join tally as t on t.tally = n.tally
