-- purpose: read where the figures come from; ids below 1 are made-up nodes, so that a network without any
--          comes from OpenStreetMap, unless the store says that it is invented
-- grain:   one row; none without a network
-- params:  none
-- reads:   network, junction, tally, meta; writes: nothing
select
    n.network_digest,
    (select coalesce(list(distinct reference_id order by reference_id), []) from tally) as reference_ids,
    (select count(*) > 0 and min(junction_id) > 0 from junction)
    and not exists (select 1 from meta where key = 'network_source' and value <> 'osm') as is_osm
from network as n
