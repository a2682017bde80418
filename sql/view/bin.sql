-- purpose: the fixed bins; the edges of tally/bins.py, made by the same whole-number rule: 250 ms within 10 s,
--          then steps of a 50th of the inner edge, rounded down, up to an hour
-- grain:   one row per bin; the first is open below, the last above
-- params:  none
-- reads:   range(); writes: nothing
create view bin as
with recursive outer_edge as (
    select 10000::bigint as edge_ms
    union all
    select least(edge_ms + edge_ms // 50, 3600000)::bigint as edge_ms
    from outer_edge
    where edge_ms < 3600000
), edge as (
    select edge_ms from outer_edge
    union all
    select -edge_ms as edge_ms from outer_edge
    union all
    select -9750 + 250 * range as edge_ms from range(79)
), numbered as (
    select
        row_number() over (order by edge_ms) as bin_ix, edge_ms as lower_ms,
        lead(edge_ms) over (order by edge_ms) as upper_ms
    from edge
)
select 0::integer as bin_ix, null::bigint as lower_ms, min(lower_ms) as upper_ms, null::double as mid_ms
from numbered
union all
select bin_ix::integer, lower_ms, upper_ms, (lower_ms + upper_ms) / 2 as mid_ms
from numbered
