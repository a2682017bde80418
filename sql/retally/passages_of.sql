-- purpose: read the passages whose counts stand under one batch's number, with the number of their movement (null
--          where the network has no such movement)
-- grain:   one row per passage
-- params:  $holder_id
-- reads:   incoming (registered: junction_id bigint, arm_in integer, arm_out integer, ix integer), passage, batch;
--          writes: nothing
select i.ix, epoch_us(p.entry_at) as at_us, p.delay_ms, p.is_queued_at_gate
from passage as p
left join incoming as i on i.junction_id = p.junction_id and i.arm_in = p.arm_in and i.arm_out = p.arm_out
where p.batch_id in (select b.batch_id from batch as b where coalesce(b.rolled_into, b.batch_id) = $holder_id)
