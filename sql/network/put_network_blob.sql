-- purpose: load the network blob rows of a network
-- grain:   one row per array
-- params:  none
-- reads:   incoming (registered:
--            name varchar, body blob); writes: network_blob
insert into network_blob (
    name, body
)
select
    name, body
from incoming
