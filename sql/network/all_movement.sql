-- purpose: read the movement rows of the network
-- grain:   one row per movement
-- params:  none
-- reads:   movement; writes: nothing
select
    junction_ix, junction_id, arm_in, arm_out, arm_in_ix, arm_out_ix, turn_deg, maneuver, inside_m,
    is_banned, is_timed
from movement
order by arm_in_ix, arm_out_ix
