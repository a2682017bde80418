-- purpose: ways through a junction
-- grain:   one row per junction, arm in, arm out
-- params:  none
-- reads:   nothing; writes: movement
create table movement (
    junction_ix integer not null check (junction_ix >= 0),
    junction_id bigint not null,
    arm_in integer not null check (arm_in >= 0),
    arm_out integer not null check (arm_out >= 0),
    arm_in_ix integer not null check (arm_in_ix >= 0),
    arm_out_ix integer not null check (arm_out_ix >= 0),
    turn_deg double not null check (turn_deg > -180 and turn_deg <= 180),
    maneuver varchar not null,
    -- shortest open path from mouth to mouth
    inside_m double not null check (inside_m >= 0),
    is_banned boolean not null,
    is_timed boolean not null,
    primary key (arm_in_ix, arm_out_ix)
)
