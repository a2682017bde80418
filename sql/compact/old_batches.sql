-- purpose: find the batches that lie before a time, with the month of their first ping; one that only closed goes
--          with the batch before it
-- grain:   one row per batch
-- params:  $before_us
-- reads:   batch; writes: nothing
with dated as (
    select
        batch_id, batch_name, rolled_into,
        last_value(first_ping_at ignore nulls) over (order by batch_id) as first_at,
        last_value(last_ping_at ignore nulls) over (order by batch_id) as last_at
    from batch
)
select batch_id, batch_name, rolled_into, strftime(first_at, '%Y-%m') as month
from dated
where last_at < make_timestamp($before_us)
order by batch_id
