-- purpose: find passages of one vehicle that overlap in time: pings that count twice
-- grain:   one row per passage at fault; empty means sound
-- params:  none
-- reads:   passage; writes: nothing
with ordered as (
    select
        vehicle, batch_id, junction_id, entry_at, exit_at,
        max(exit_at) over (
            partition by vehicle order by entry_at, exit_at rows between unbounded preceding and 1 preceding
        ) as reached_at
    from passage
)
select vehicle, batch_id, junction_id, entry_at, exit_at, reached_at
from ordered
where entry_at < reached_at
order by vehicle, entry_at
