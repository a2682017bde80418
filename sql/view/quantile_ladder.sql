-- purpose: quantiles of every stratum over all batches, in ms (or ms per km): the order statistic of rank
--          ceil(q n), shown by the middle of its bin, null where that bin is open
-- grain:   one row per tally, stratum
-- params:  none
-- reads:   histogram_total, bin; writes: nothing
create view quantile_ladder as
with running as (
    select
        h.tally, h.stratum_id, b.mid_ms, h.bin_ix,
        sum(h.n) over (partition by h.tally, h.stratum_id order by h.bin_ix)::bigint as below,
        sum(h.n) over (partition by h.tally, h.stratum_id)::bigint as n
    from histogram_total as h
    join bin as b on b.bin_ix = h.bin_ix
)
select
    tally, stratum_id, max(n) as n,
    -- whole numbers: rank ceil(q n) is reached where below >= q n
    arg_min_null(mid_ms, bin_ix) filter (where 100 * below >= 5 * n) as p5_ms,
    arg_min_null(mid_ms, bin_ix) filter (where 100 * below >= 15 * n) as p15_ms,
    arg_min_null(mid_ms, bin_ix) filter (where 100 * below >= 50 * n) as p50_ms,
    arg_min_null(mid_ms, bin_ix) filter (where 100 * below >= 85 * n) as p85_ms,
    arg_min_null(mid_ms, bin_ix) filter (where 100 * below >= 95 * n) as p95_ms
from running
group by tally, stratum_id
