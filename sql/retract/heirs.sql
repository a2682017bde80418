-- purpose: find the batches that went on from one batch, by the number that their counts stand under
-- grain:   one row per number
-- params:  $batch_id
-- reads:   carry, batch; writes: nothing
select distinct coalesce(b.rolled_into, b.batch_id) as holder_id
from carry as c
join batch as b on b.batch_id = c.replaced_by
where c.batch_id = $batch_id
order by holder_id
