-- purpose: load the movement rows of a network
-- grain:   one row per movement
-- params:  none
-- reads:   incoming (registered:
--            junction_ix integer, junction_id bigint, arm_in integer, arm_out integer, arm_in_ix integer,
--            arm_out_ix integer, turn_deg double, maneuver varchar, inside_m double, is_banned boolean,
--            is_timed boolean); writes: movement
insert into movement (
    junction_ix, junction_id, arm_in, arm_out, arm_in_ix, arm_out_ix, turn_deg, maneuver, inside_m,
    is_banned, is_timed
)
select
    junction_ix, junction_id, arm_in, arm_out, arm_in_ix, arm_out_ix, turn_deg, maneuver, inside_m,
    is_banned, is_timed
from incoming
