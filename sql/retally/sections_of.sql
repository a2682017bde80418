-- purpose: read the sections whose counts stand under one batch's number, with the number of the arm they come
--          from (null where the network has no such arm)
-- grain:   one row per section
-- params:  $holder_id
-- reads:   incoming (registered: junction_id bigint, arm integer, ix integer), section, batch; writes: nothing
select i.ix, epoch_us(s.from_at) as at_us, s.duration_ms, s.path_m
from section as s
left join incoming as i on i.junction_id = s.junction_from_id and i.arm = s.arm_from
where s.batch_id in (select b.batch_id from batch as b where coalesce(b.rolled_into, b.batch_id) = $holder_id)
