-- purpose: count the passages whose delays rest on another reference than the one in use
-- grain:   one row
-- params:  $reference_id
-- reads:   passage; writes: nothing
select count(*) as n
from passage
where reference_id <> $reference_id
