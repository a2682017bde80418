-- purpose: read the arrays that detection needs
-- grain:   one row per array
-- params:  none
-- reads:   network_blob; writes: nothing
select name, body
from network_blob
order by name
