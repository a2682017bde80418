-- purpose: find batches on another network than the one that is in, under other keys than their neighbours, or
--          whose content digest is no digest
-- grain:   one row per batch at fault; empty means sound
-- params:  none
-- reads:   batch, network; writes: nothing
with newest as (
    select config_digest
    from batch
    order by batch_id desc
    limit 1
)
select
    b.batch_id, b.batch_name, b.network_digest, n.network_digest as wanted_network_digest, b.config_digest,
    w.config_digest as wanted_config_digest, b.content_digest
from batch as b
cross join newest as w
left join network as n on true
where
    b.network_digest is distinct from n.network_digest
    or b.config_digest <> w.config_digest
    or not (
        regexp_full_match(b.content_digest, '[0-9a-f]{64}')
        or (b.content_digest = 'close:' || b.batch_id::varchar and len(b.files) = 0)
    )
order by b.batch_id
