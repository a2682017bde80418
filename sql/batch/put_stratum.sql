-- purpose: name the strata that no earlier batch had
-- grain:   one row per tally, stratum, dimension
-- params:  none
-- reads:   incoming (registered:
--            tally varchar, stratum_id bigint, dimension varchar, value varchar), stratum; writes: stratum
insert into stratum (tally, stratum_id, dimension, value)
select n.tally, n.stratum_id, n.dimension, n.value
from incoming as n
anti join stratum as s on s.tally = n.tally and s.stratum_id = n.stratum_id and s.dimension = n.dimension
