-- purpose: find batches whose rows in are not the rows used, dropped by reason, and held
-- grain:   one row per batch at fault; empty means sound
-- params:  none
-- reads:   batch, batch_count; writes: nothing
with dropped as (
    select batch_id, sum(n)::bigint as n
    from batch_count
    group by batch_id
)
select
    b.batch_id, b.batch_name, b.rows_in, b.rows_used, b.rows_dropped, b.rows_held,
    coalesce(d.n, 0) as rows_by_reason
from batch as b
left join dropped as d on d.batch_id = b.batch_id
where b.rows_in <> b.rows_used + b.rows_dropped + b.rows_held or b.rows_dropped <> coalesce(d.n, 0)
order by b.batch_id
